// A small line drawing with its two axes named, made without the plotting library.

const SVG = "http://www.w3.org/2000/svg";
const [WIDTH, HEIGHT] = [300, 110];
const BOX = { left: 26, right: 8, top: 6, bottom: 28 };

function shape(tag, attributes, text = null) {
  const element = document.createElementNS(SVG, tag);
  for (const [name, value] of Object.entries(attributes)) element.setAttribute(name, value);
  if (text !== null) element.textContent = text;
  return element;
}

/** y against x, both plain numbers, x ascending and y from 0 to 1. */
export function sparkline(x, y, titles) {
  const [first, last] = [x[0], x.at(-1)];
  const across = (value) => BOX.left + ((value - first) / (last - first)) * (WIDTH - BOX.left - BOX.right);
  const foot = HEIGHT - BOX.bottom;
  const up = (value) => foot - value * (foot - BOX.top);
  const path = x.map((value, i) => `${i ? "L" : "M"}${across(value).toFixed(1)} ${up(y[i]).toFixed(1)}`);
  const drawing = shape("svg", { viewBox: `0 0 ${WIDTH} ${HEIGHT}`, class: "sparkline", "aria-hidden": "true" });
  drawing.append(
    shape("path", { d: `M${BOX.left} ${BOX.top}V${foot}H${WIDTH - BOX.right}`, class: "frame" }),
    shape("path", { d: path.join(""), class: "curve-line" }),
    shape("text", { x: BOX.left, y: foot + 12 }, Number(first.toPrecision(3))),
    shape("text", { x: WIDTH - BOX.right, y: foot + 12, "text-anchor": "end" }, Number(last.toPrecision(3))),
    shape("text", { x: WIDTH / 2, y: HEIGHT - 3, "text-anchor": "middle" }, titles.x),
    shape("text", { x: 9, y: foot / 2, "text-anchor": "middle", transform: `rotate(-90 9 ${foot / 2})` }, titles.y),
  );
  return drawing;
}
