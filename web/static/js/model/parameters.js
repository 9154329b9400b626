// The parameters of an experiment in words: what is switched on, and what a plot was made with.

import { brief, plain } from "./quantities.js";

/** Whether a parameter applies where its siblings have these values. */
const holds = (siblings, when) =>
  Object.entries(when).every(([name, allowed]) => allowed.includes(siblings?.[name]));

const said = (value) => (typeof value === "number" ? brief(value, 6) : String(value).replaceAll("_", " "));

/** A title inside a sentence: "Dispersion D" → "dispersion D", while PMD and β2 stay. */
const inside = (title) => (/^[A-Z][a-z]/.test(title) ? title.charAt(0).toLowerCase() + title.slice(1) : title);

const withUnit = (text, unit) => (unit ? `${text} ${unit}` : text);

/** Every parameter of a stage that applies: [{title, unit, value, path, off}]. */
function ofStage(siblings, stage, parameters) {
  return parameters
    .filter(({ path }) => path.slice(0, path.lastIndexOf(".")) === stage)
    .filter(({ when }) => holds(siblings, when))
    .map((one) => {
      const value = siblings?.[one.path.slice(stage.length + 1)] ?? null;
      return { ...one, value, off: value === null || (one.switched && value === one.default) };
    });
}

/** What is switched on in a stage, in words: "noise figure 5 dB, optical band-pass 100 GHz". */
export function effects(experiment, stage, parameters) {
  return ofStage(experiment[stage], stage, parameters)
    .filter(({ switched, off }) => switched && !off)
    .map(({ title, unit, value }) => `${inside(title)} ${withUnit(said(value), unit)}`);
}

/** Whether an amplifier is there at all. */
export const amplifies = (amplifier) => (amplifier?.noise_figure_db ?? null) !== null;

/** The names of what is switched on in any span of a line, beyond what every line has. */
export function lineEffects(line, parameters) {
  const names = line.flatMap((span) =>
    ofStage(span, "line.*", parameters)
      .filter(({ switched, rare, off }) => switched && rare && !off)
      .map(({ title }) => title));
  return [...new Set(names)];
}

/**
 * Everything that fixes a result, stage by stage: [{name, items: [{title, unit, value, path, off}]}].
 */
export function everyParameter(experiment, parameters) {
  const stages = [...new Set(parameters.map(({ path }) => path.slice(0, path.lastIndexOf("."))))];
  return stages.flatMap((stage) => {
    if (stage !== "line.*") {
      return [{ name: stage, items: ofStage(experiment[stage], stage, parameters) }];
    }
    return experiment.line.map((span, index) => ({
      name: `span ${index + 1}`,
      items: ofStage(span, stage, parameters).map((item) => ({
        ...item, path: item.path.replace("*", index),
      })),
    }));
  });
}

const textOf = ({ value }) => {
  if (value === null) return "none";
  if (typeof value === "object") return value.name || "measured points";
  return typeof value === "number" ? plain(value) : String(value);
};

/** One line for each parameter, for the head of a data file: "source.width_ghz = 24 GHz". */
export function parameterRows(experiment, parameters) {
  return everyParameter(experiment, parameters).flatMap(({ items }) =>
    items.map((item) => `${item.path} = ${withUnit(textOf(item), item.value === null ? "" : item.unit)}`));
}

/** One line for each stage, for the foot of a drawing; what is switched off is left out. */
export function parameterSentences(experiment, parameters) {
  return everyParameter(experiment, parameters).flatMap(({ name, items }) => {
    if (/booster|preamplifier/.test(name) && !amplifies(experiment[name])) return [];
    const on = items.filter(({ off }) => !off);
    if (!on.length) return [];
    const words = on.map((item) => {
      const text = typeof item.value === "number" ? brief(item.value, 6) : textOf(item).replaceAll("_", " ");
      return `${inside(item.title)} ${withUnit(text, item.unit)}`;
    });
    return [`${name}: ${words.join(", ")}`];
  });
}
