// Requests to the server, with its one error shape turned into one exception.

export class Refusal extends Error {
  constructor(message, { code = "unreachable", where = "", status = 0 } = {}) {
    super(message);
    this.code = code;
    this.where = where;
    this.status = status;
  }
}

async function refusalOf(response) {
  try {
    const { error } = await response.json();
    return new Refusal(error.message, { ...error, status: response.status });
  } catch {
    return new Refusal(`The server answered ${response.status}. Try again in a moment.`, {
      code: "unexpected",
      status: response.status,
    });
  }
}

async function send(method, url, body, type = "application/json") {
  const options = { method, headers: {} };
  if (body !== undefined) {
    options.headers["Content-Type"] = type;
    options.body = type === "application/json" ? JSON.stringify(body) : body;
  }
  let response;
  try {
    response = await fetch(url, options);
  } catch {
    throw new Refusal("The server does not answer. Check that it is running, then try again.");
  }
  if (!response.ok) throw await refusalOf(response);
  return response;
}

const json = async (method, url, body) => (await send(method, url, body)).json();

export const get = (url) => json("GET", url);
export const post = (url, body) => json("POST", url, body);
/** Send a text or file as it is. */
export const postText = async (url, body) => (await send("POST", url, body, "text/plain")).json();
export const patch = (url, body) => json("PATCH", url, body);
export const remove = (url) => json("DELETE", url);
export const put = (url) => json("PUT", url);

/** An evolution map: three planes of bytes and the power that one count stands for. */
export async function getMap(url) {
  const response = await send("GET", url);
  return {
    data: new Uint8Array(await response.arrayBuffer()),
    rows: Number(response.headers.get("X-Map-Rows")),
    columns: Number(response.headers.get("X-Map-Columns")),
    scale: Number(response.headers.get("X-Map-Intensity-Scale")),
  };
}
