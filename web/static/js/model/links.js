// Every address that the page asks for or leads to.

const part = encodeURIComponent;

export const api = {
  access: "/api/access",
  runs: "/api/runs",
  events: "/api/events",
  sessions: "/api/sessions",
  runsFound: (search, limit, offset) =>
    `/api/runs?search=${part(search)}&limit=${limit}&offset=${offset}`,
  run: (id) => `/api/runs/${part(id)}`,
  view: (id) => `/api/runs/${part(id)}/view`,
  cancel: (id) => `/api/runs/${part(id)}/cancel`,
  resume: (id) => `/api/runs/${part(id)}/resume`,
  restoreRun: (id) => `/api/runs/${part(id)}/restore`,
  detail: (id, variant, point) => `/api/runs/${part(id)}/points/${variant}/${point}`,
  map: (id, variant, point) => `/api/runs/${part(id)}/maps/${variant}/${point}`,
  runEvents: (id, after) => `/api/runs/${part(id)}/events?after=${part(after)}`,
  result: (id) => `/api/runs/${part(id)}/result`,
  csv: (id) => `/api/runs/${part(id)}/curves.csv`,
  session: (id) => `/api/sessions/${part(id)}`,
  restoreSession: (id) => `/api/sessions/${part(id)}/restore`,
  sessionRun: (session, run) => `/api/sessions/${part(session)}/runs/${part(run)}`,
  fibres: (wavelengthNm) => `/api/fibres?wavelength_nm=${part(wavelengthNm)}`,
  plan: "/api/plan",
  spectra: (choices) => `/api/spectra?${new URLSearchParams(choices)}`,
  overlay: (curves) => `/api/overlay?${curveQuery(curves)}`,
};

export const pages = {
  bench: "/",
  run: (id) => `/runs/${part(id)}`,
  session: (id) => `/sessions/${part(id)}`,
  overlay: (curves) => `/overlay?${curveQuery(curves)}`,
  library: (curves) => (curves.length ? `/library?${curveQuery(curves)}` : "/library"),
};

function curveQuery(curves) {
  return curves.map(({ run, variant }) => `curve=${part(run)}:${variant}`).join("&");
}

/** The curves named in an address's query, as {run, variant}. */
export function curvesIn(search) {
  return new URLSearchParams(search).getAll("curve").flatMap((text) => {
    const match = /^([^:]+):(\d+)$/.exec(text);
    return match ? [{ run: match[1], variant: Number(match[2]) }] : [];
  });
}

/** The last part of a page's path: the identity of the run or session that it shows. */
export function identityIn(pathname) {
  const match = /^\/(?:runs|sessions)\/([^/]+)\/?$/.exec(pathname);
  return match ? decodeURIComponent(match[1]) : null;
}
