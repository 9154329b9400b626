// Numbers of a run in tables: the readout of one point, the curve's values, the remarks.

import { brief, withError } from "../model/quantities.js";
import { limitOf } from "../plots/dip.js";
import { make } from "./elements.js";

const heading = (text, scope) => make("th", { scope }, text);

const milliwatts = (watts) => `${brief(1e3 * watts, 4)} mW`;

const READOUT = [
  ["C12(0)", ({ summary }) => withError(summary.value, summary.standard_error)],
  ["Discretization error", ({ summary }) => brief(summary.discretization_error, 2)],
  ["Limited by", ({ summary }) => limitOf(summary) || "–"],
  ["Linear regime", ({ summary }) => brief(summary.linear, 3)],
  ["⟨I1 I2⟩/(⟨I1⟩⟨I2⟩)", ({ moment_cross: m }) => withError(m.value, m.standard_error)],
  ["Walls", ({ walls_per_ns: w }) => withError(w.value, w.standard_error, "/ns")],
  ["Mean domain duration", ({ mean_duration_ps: d }) => withError(d.value, d.standard_error, "ps")],
  ["Wall width", ({ wall_width_ps: w }) => (w ? withError(w.value, w.standard_error, "ps") : "–")],
  ["Degree of polarization", ({ polarization: p }) => {
    const degree = p?.received?.degree;
    return degree ? withError(degree.value, degree.standard_error) : "–";
  }],
  ["Degree within the wall smoothing", ({ polarization: p }) => {
    const degree = p?.local_degree;
    return degree ? withError(degree.value, degree.standard_error) : "–";
  }],
  ["Launched, component 1", ({ energy }) => milliwatts(energy.launched_1_w)],
  ["Launched, component 2", ({ energy }) => milliwatts(energy.launched_2_w)],
  ["Received, component 1", ({ energy }) => milliwatts(energy.received_1_w)],
  ["Received, component 2", ({ energy }) => milliwatts(energy.received_2_w)],
  ["Realizations", ({ summary }) => brief(summary.realizations, 7)],
  ["Steps", ({ steps }) => brief(steps, 7)],
  ["Transforms", ({ transforms }) => brief(transforms, 9)],
];

/** columns: [{name, detail|null}] */
export function fillReadout(table, columns) {
  const head = make("tr", {}, heading("", "col"), ...columns.map(({ name }) => heading(name, "col")));
  const rows = READOUT.map(([title, cell]) =>
    make("tr", {}, heading(title, "row"),
      ...columns.map(({ detail }) => make("td", {}, detail?.energy ? cell(detail) : "–"))),
  );
  table.replaceChildren(make("thead", {}, head), make("tbody", {}, ...rows));
}

/** Every C12(0) of a run; sweep as sweepAxis() gives it. */
export function fillValues(table, run, sweep) {
  const head = make("tr", {}, heading(sweep.title, "col"),
    ...run.variants.map(({ name }) => heading(name, "col")));
  const rows = sweep.values.map((value, point) =>
    make("tr", {}, heading(brief(value), "row"),
      ...run.variants.map((_, variant) => make("td", {}, valueText(run.summary(variant, point))))),
  );
  table.replaceChildren(make("thead", {}, head), make("tbody", {}, ...rows));
}

function valueText(summary) {
  if (!summary) return "–";
  if (summary.outcome !== "completed") return `flagged: ${summary.outcome.replaceAll("_", " ")}`;
  const tail = !summary.final ? " (so far)" : summary.target_met ? "" : " (stopped at the cap)";
  return withError(summary.value, summary.standard_error) + tail;
}

const sentence = (text) => `${text.charAt(0).toUpperCase()}${text.slice(1)}${/[.!?]$/.test(text) ? "" : "."}`;

/** What has to be said about points that are no values, or stopped early. */
export function fillRemarks(box, run, sweep) {
  const { flagged, capped } = run.remarks();
  const name = ({ variant, point }) => `${run.variants[variant].name} at ${sweep.text(point)}`;
  const items = flagged.map((one) =>
    make("li", { class: "flag" },
      `${name(one)}: ${one.outcome.replaceAll("_", " ")}, not drawn as a value. ${sentence(one.advice)}`),
  );
  if (capped.length) {
    const target = run.study.experiment.ensemble;
    items.push(make("li", {},
      `${capped.length === 1 ? "1 point" : `${capped.length} points`} stopped at the cap of ` +
      `${target.max_realizations} realizations before the standard error reached ` +
      `${brief(target.standard_error_target)} (dotted markers): ${capped.map(name).join("; ")}. ` +
      "Raise “Most realizations” to go on.",
    ));
  }
  box.replaceChildren(make("ul", {}, ...items));
  box.hidden = items.length === 0;
}
