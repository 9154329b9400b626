// What leaves the page: the data of a plot as CSV, and the words printed under a drawing.

const MOST_LETTERS = 150;

const cell = (value) => {
  if (value === null || value === undefined || Number.isNaN(value)) return "";
  const text = String(value);
  return /[",\n]/.test(text) ? `"${text.replaceAll('"', '""')}"` : text;
};

const row = (values) => values.map(cell).join(",");

/** A CSV file: comment lines, a heading, rows. */
export function csv(comments, heads, rows) {
  return `${[...comments.map((text) => `# ${text}`), row(heads), ...rows.map(row)].join("\n")}\n`;
}

const titleOf = (layout, name) => layout[name.replace(/^([xy])(\d*)$/, "$1axis$2")]?.title?.text ?? "";

/** Curves that were computed or are compared with; decoration has no name. */
const isData = ({ name, x, yaxis }) => name && x && yaxis !== "y2";

/** The data of a figure, one row for each point of each curve, with every error that is drawn. */
export function csvOfFigure({ traces, layout }, comments) {
  const data = traces.filter(isData);
  if (data.length && data.every(({ type }) => type === "heatmap")) return csvOfMap(data[0], layout, comments);
  const extra = [...new Set(data.flatMap(({ meta }) => Object.keys(meta?.columns ?? {})))];
  const axes = [...new Set(data.map(({ xaxis }) => xaxis ?? "x"))];
  const heads = ["curve", ...axes.map((name) => titleOf(layout, name)), titleOf(layout, "y"), ...extra];
  const rows = data.flatMap((trace) => [...trace.x].flatMap((x, i) => {
    const errors = extra.map((key) => trace.meta?.columns?.[key]?.[i] ?? null);
    if (trace.y[i] === null && errors.every((error) => error === null)) return [];
    return [[trace.name, ...axes.map((name) => ((trace.xaxis ?? "x") === name ? x : null)), trace.y[i], ...errors]];
  }));
  return csv(comments, heads, rows);
}

function csvOfMap({ name, x, y, z }, layout, comments) {
  const rows = y.flatMap((up, j) => [...x].map((across, i) => [across, up, z[j][i]]));
  return csv(comments, [titleOf(layout, "x"), titleOf(layout, "y"), name], rows);
}

/** Sentences broken into lines that fit under a drawing. */
export function wrapped(sentences, letters = MOST_LETTERS) {
  return sentences.flatMap((sentence) => {
    const lines = [];
    let text = "";
    for (const word of sentence.split(" ")) {
      if (text && text.length + word.length + 1 > letters) {
        lines.push(text);
        text = `  ${word}`;
      } else text = text ? `${text} ${word}` : word;
    }
    return [...lines, text];
  });
}

/** Save a text as a file. */
export function saveText(text, filename, type) {
  const url = URL.createObjectURL(new Blob([text], { type }));
  const link = document.createElement("a");
  link.href = url;
  link.download = filename;
  link.click();
  // A browser under load fetches it late.
  setTimeout(() => URL.revokeObjectURL(url), 60_000);
}
