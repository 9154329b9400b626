// Kinds of fibre from the catalogue, put into a span and recognized in one.

// What belongs to a place in the line, not to a kind of fibre.
const OF_THE_PLACE = new Set(["length_km", "joint_loss_db", "axes_deg", "retardance_deg", "gain_db_per_km"]);

/** A span turned into one of a kind: its figures, and nothing that the kind does not have. */
export function spanOfKind(span, kind, parameters) {
  const bare = Object.fromEntries(
    parameters
      .filter(({ path }) => path.startsWith("line.*."))
      .map(({ path, default: absent }) => [path.slice("line.*.".length), absent]),
  );
  const kept = Object.fromEntries(Object.entries(span).filter(([name]) => OF_THE_PLACE.has(name)));
  const given = Object.entries(kind.span).filter(([name]) => !OF_THE_PLACE.has(name));
  return { ...bare, ...kept, ...Object.fromEntries(given) };
}

/** The kind whose every figure a span has; null when there is none. */
export function kindOf(span, kinds) {
  const has = (kind) => Object.entries(kind.span).every(
    ([name, value]) => OF_THE_PLACE.has(name) || span[name] === value,
  );
  return kinds.find(has) ?? null;
}
