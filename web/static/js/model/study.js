// A study as the form edits it: paths into its tree, bounds, and one-line summaries.

import { amplifies, effects, lineEffects } from "./parameters.js";
import { brief, parseNumber, plain, POWER_PATH } from "./quantities.js";

export function read(tree, path) {
  return path.split(".").reduce((node, key) => (node == null ? undefined : node[key]), tree);
}

export function write(tree, path, value) {
  const keys = path.split(".");
  const last = keys.pop();
  keys.reduce((node, key) => node[key], tree)[last] = value;
}

/**
 * What is wrong with a typed entry, or the value it stands for.
 * spec: {kind, low, high, optional, title, unit, bounds}
 */
export function interpret(text, spec) {
  const tidy = text.trim();
  if (spec.kind === "choice" || spec.kind === "text") {
    return tidy ? { value: tidy } : { fault: `Give ${spec.title.toLowerCase()}.` };
  }
  if (tidy === "") {
    return spec.optional ? { value: null } : { fault: `Give a number${range(spec)}.` };
  }
  const value = parseNumber(tidy);
  if (value === null) return { fault: `“${tidy}” is not a number: write it like 12.5 or 1e-3.` };
  if (spec.kind === "integer" && !Number.isInteger(value)) {
    return { fault: `Give a whole number${range(spec)}.` };
  }
  if ((spec.low !== null && value < spec.low) || (spec.high !== null && value > spec.high)) {
    return { fault: `Out of range: give a value${range(spec)}.` };
  }
  return { value };
}

function range({ low, high, unit }) {
  const tail = unit ? ` ${unit}` : "";
  if (low !== null && high !== null) return ` from ${brief(low)} to ${brief(high)}${tail}`;
  if (low !== null) return ` of at least ${brief(low)}${tail}`;
  return high !== null ? ` of at most ${brief(high)}${tail}` : "";
}

/** Whether a parameter applies: its condition holds in the experiment or in any variant. */
export function applies(study, path, when) {
  const parent = path.slice(0, path.lastIndexOf("."));
  return Object.entries(when).every(([name, allowed]) => {
    const own = `${parent}.${name}`;
    if (allowed.includes(read(study, own))) return true;
    const inside = own.replace(/^experiment\./, "");
    const spread = inside.replace(/^line\.\d+\./, "line.*.");
    return study.variants.some((variant) =>
      [inside, spread].some((key) => allowed.includes(variant.changes[key])),
    );
  });
}

const RELATION_PATH = "relation.kind";
const COUPLING_PATH = "line.*.coupling";

/** A variant's changes apart from those that have an entry of their own. */
export function otherChanges(changes) {
  return Object.entries(changes).filter(([path]) => path !== RELATION_PATH && path !== COUPLING_PATH);
}

export function changesFrom(relation, coupling, rows) {
  const changes = {};
  if (relation) changes[RELATION_PATH] = relation;
  if (coupling) changes[COUPLING_PATH] = coupling;
  for (const { path, text } of rows) if (path) changes[path] = changeValue(text);
  return changes;
}

export const relationOf = (changes) => changes[RELATION_PATH] ?? "";
export const couplingOf = (changes) => changes[COUPLING_PATH] ?? "";

function changeValue(text) {
  const tidy = text.trim();
  if (tidy === "") return null;
  return parseNumber(tidy) ?? tidy;
}

export const changeText = (value) => (typeof value === "number" ? plain(value) : String(value ?? ""));

const power = (mw, unit) =>
  unit === "dBm" ? `${brief(10 * Math.log10(mw), 3)} dBm` : `${brief(mw, 3)} mW`;

/** One line for an axis of a study: "12 × total power, 5 mW to 800 mW". */
function sweepLine(sweep, { powerUnit, parameters }) {
  const swept = parameters.find((one) => one.path === sweep.parameter);
  const ends =
    sweep.parameter === POWER_PATH
      ? `${power(sweep.start, powerUnit)} to ${power(sweep.stop, powerUnit)}`
      : `${brief(sweep.start)} to ${brief(sweep.stop)} ${swept?.unit ?? ""}`;
  return `${sweep.points} × ${swept?.title.toLowerCase() ?? sweep.parameter}, ${ends}`;
}

function lineSummary(line, parameters) {
  const length = line.reduce((sum, span) => sum + (span.length_km ?? 0), 0);
  const spans = line.length === 1 ? "1 span" : `${line.length} spans`;
  const dispersion = line[0].dispersion_ps_per_nm_km ?? null;
  const fibre =
    dispersion === null
      ? `β2 ${brief(line[0].beta2_ps2_per_km)} ps²/km`
      : `D ${brief(dispersion)} ps/(nm·km)`;
  return [`${spans}, ${brief(length)} km, ${fibre}`, ...lineEffects(line, parameters)].join(", ");
}

function receiverSummary(receiver, on, label) {
  const filters = ["", "digitizer_"].flatMap((arm) =>
    ((receiver[`${arm}filter`] ?? "none") === "none" ? [] : [
      `${label(receiver[`${arm}filter`])} ${brief(receiver[`${arm}bandwidth_ghz`])} GHz`,
    ]));
  const words = ["shot_noise", "noise_correction"].flatMap((name) =>
    (receiver[name] === "on" ? [name.replace("_", " ")] : []));
  return [...filters, ...words, ...on].join(", ") || "ideal";
}

/** One line for each closed section of the form: what it is, and what is switched on. */
export function summaries(study, { powerUnit, label, parameters }) {
  const { source, relation, launch, line, receiver, ensemble } = study.experiment;
  const on = (stage) => effects(study.experiment, stage, parameters);
  const listed = (stage) => on(stage).join(", ") || "off";
  const stepPs = ensemble.window_ps / ensemble.samples;
  const light =
    source.shape === "measured"
      ? `measured${source.measured?.name ? ` (${source.measured.name})` : ""}`
      : `${label(source.shape)}, ${brief(source.width_ghz)} GHz`;
  const amplifier = (stage) => {
    const { gain_db: gain } = study.experiment[stage] ?? {};
    return amplifies(study.experiment[stage]) ? [`gain ${brief(gain)} dB`, ...on(stage)].join(", ") : "off";
  };
  const grid = ensemble.grid === "automatic" ? "chosen when run" : `${ensemble.samples} × ${brief(stepPs, 3)} ps`;
  return {
    source: `${light} at ${brief(source.wavelength_nm)} nm`,
    relation: [label(relation.kind), ...on("relation")].join(", "),
    shaper: listed("shaper"),
    booster: amplifier("booster"),
    launch: [
      power(launch.total_power_mw, powerUnit), `${brief(100 * launch.share_1, 3)} % in 1`, ...on("launch"),
    ].join(", "),
    line: lineSummary(line, parameters),
    preamplifier: amplifier("preamplifier"),
    receiver: receiverSummary(receiver, on("receiver"), label),
    ensemble: `${grid}, ±${brief(ensemble.standard_error_target)}`,
    sweep: sweepLine(study.sweep, { powerUnit, parameters }),
    second: study.second ? sweepLine(study.second, { powerUnit, parameters }) : "none",
    variants: study.variants.map((variant) => variant.name).join(" · "),
  };
}

function writeAll(node, [key, ...rest], value) {
  if (key === "*") node.forEach((item) => writeAll(item, rest, value));
  else if (rest.length) writeAll(node[key], rest, value);
  else node[key] = value;
}

/** An experiment with some parameters replaced, by path; * stands for every span. */
export function withChanges(experiment, changes) {
  const copy = structuredClone(experiment);
  for (const [path, value] of Object.entries(changes)) writeAll(copy, path.split("."), value);
  return copy;
}

/** Whether two studies are the same question. */
export const sameStudy = (a, b) => JSON.stringify(ordered(a)) === JSON.stringify(ordered(b));

function ordered(value) {
  if (Array.isArray(value)) return value.map(ordered);
  if (value === null || typeof value !== "object") return value;
  return Object.fromEntries(Object.keys(value).sort().map((key) => [key, ordered(value[key])]));
}

const LIGHT_SPEED_NM_PER_PS = 299792.458;

/** β2 from D or D from β2: β2 = −D λ²/(2πc). ``given`` names the one whose value this is. */
export function equivalentDispersion(value, given, wavelengthNm) {
  const factor = -(wavelengthNm ** 2) / (2 * Math.PI * LIGHT_SPEED_NM_PER_PS);
  return given === "dispersion_ps_per_nm_km" ? value * factor : value / factor;
}
