// Numbers as people read and type them.

export const POWER_PATH = "launch.total_power_mw";

export const dbmFromMw = (mw) => 10 * Math.log10(mw);
export const mwFromDbm = (dbm) => 10 ** (dbm / 10);

// Rounding leaves such a residue where a closed form is zero; no quantity here is this small.
const NOTHING = 1e-15;

/** A number at a given count of significant digits, without trailing zeros. */
export function brief(value, digits = 4) {
  if (value === null || value === undefined || !Number.isFinite(value)) return "–";
  if (Math.abs(value) < NOTHING) return "0";
  const size = Math.abs(value);
  const text =
    size >= 1e6 || size < 1e-4
      ? value.toExponential(Math.max(0, digits - 1)).replace(/\.?0+e/, "e").replace("e+", "e")
      : String(Number(value.toPrecision(digits)));
  return text.replaceAll("-", "−");
}

/** A value with its standard error, both to the error's second digit: −0.123 ± 0.010. */
export function withError(value, error, unit = "") {
  if (value === null || value === undefined || !Number.isFinite(value)) return "–";
  const tail = unit ? ` ${unit}` : "";
  if (!error || !Number.isFinite(error)) return brief(value) + tail;
  const decimals = Math.min(12, Math.max(0, 1 - Math.floor(Math.log10(error))));
  return `${value.toFixed(decimals).replace("-", "−")} ± ${error.toFixed(decimals)}${tail}`;
}

/** What somebody typed, as a number; null when it is none. A decimal comma and − are accepted. */
export function parseNumber(text) {
  const tidy = text.trim().replace("−", "-").replace(",", ".");
  if (!/^[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?$/i.test(tidy)) return null;
  const value = Number(tidy);
  return Number.isFinite(value) ? value : null;
}

/** The shortest text of a number that reads back to it, to 12 digits. */
export const plain = (value) => String(Number(value.toPrecision(12)));

/** A span of time in words: 8 s, 3 min, 2 h. */
export function duration(seconds) {
  if (seconds === null || seconds === undefined || !Number.isFinite(seconds)) return "";
  if (seconds < 90) return `${Math.max(1, Math.round(seconds))} s`;
  if (seconds < 5400) return `${Math.round(seconds / 60)} min`;
  return `${(seconds / 3600).toFixed(1)} h`;
}

/** How the swept parameter is drawn: its axis title and its values in the unit chosen. */
export function sweepAxis(sweep, powerUnit) {
  const inDbm = sweep.parameter === POWER_PATH && powerUnit === "dBm";
  const unit = inDbm ? "dBm" : sweep.unit;
  const values = inDbm ? sweep.values.map(dbmFromMw) : sweep.values;
  return {
    unit,
    values,
    title: unit ? `${sweep.title} (${unit})` : sweep.title,
    logarithmic: !inDbm && isGeometric(values),
    text: (i) => `${brief(values[i])}${unit ? ` ${unit}` : ""}`,
  };
}

function isGeometric(values) {
  if (values.length < 3 || values.some((x) => x <= 0)) return false;
  const first = values[1] / values[0];
  const last = values[values.length - 1] / values[values.length - 2];
  const even = Math.abs(values[1] - values[0] - (values[2] - values[1]));
  return Math.abs(first - last) < 1e-6 * first && even > 1e-9 * Math.abs(values[1]);
}
