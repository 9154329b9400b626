// A study as the form edits it: paths into its tree, bounds, and one-line summaries.

import { brief, parseNumber, plain } from "./quantities.js";

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

/** One line for each closed section of the form. */
export function summaries(study, { powerUnit, label, parameters }) {
  const { source, relation, launch, line, receiver, ensemble } = study.experiment;
  const { sweep } = study;
  const swept = parameters.find((one) => one.path === sweep.parameter);
  const ends =
    sweep.parameter === "launch.total_power_mw"
      ? `${power(sweep.start, powerUnit)} to ${power(sweep.stop, powerUnit)}`
      : `${brief(sweep.start)} to ${brief(sweep.stop)} ${swept?.unit ?? ""}`;
  const length = line.reduce((sum, span) => sum + (span.length_km ?? 0), 0);
  const spans = line.length === 1 ? "1 span" : `${line.length} spans`;
  const dispersion = line[0].dispersion_ps_per_nm_km ?? null;
  const fibre =
    dispersion === null
      ? `β2 ${brief(line[0].beta2_ps2_per_km)} ps²/km`
      : `D ${brief(dispersion)} ps/(nm·km)`;
  const stepPs = ensemble.window_ps / ensemble.samples;
  const filter = receiver.filter === "none" ? "ideal" : `${brief(receiver.bandwidth_ghz)} GHz`;
  return {
    source: `${label(source.shape)}, ${brief(source.width_ghz)} GHz at ${brief(source.wavelength_nm)} nm`,
    relation: label(relation.kind),
    launch: `${power(launch.total_power_mw, powerUnit)}, ${brief(100 * launch.share_1, 3)} % in 1`,
    line: `${spans}, ${brief(length)} km, ${fibre}`,
    receiver: receiver.extinction_db === null ? filter : `${filter}, ${brief(receiver.extinction_db)} dB`,
    ensemble: `${ensemble.samples} × ${brief(stepPs, 3)} ps, ±${brief(ensemble.standard_error_target)}`,
    sweep: `${sweep.points} × ${swept?.title.toLowerCase() ?? sweep.parameter}, ${ends}`,
    variants: study.variants.map((variant) => variant.name).join(" · "),
  };
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
