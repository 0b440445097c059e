// Takes addresses of the API, and gives their objects or an Error whose text
// may be shown to a person.

/** @param {Response} answer */
async function body(answer) {
  /** @type {any} */
  let object = null;
  try {
    object = await answer.json();
  } catch {
    object = null; // told below, by its status
  }
  if (answer.ok && object !== null) return object;
  const told = object && typeof object.title === "string" ? object.title + (object.detail ? " " + object.detail : "") : "";
  const error = new Error(told || "The program answered with status " + answer.status + ".");
  error.name = String(answer.status);
  throw error;
}

/** @param {() => Promise<Response>} ask */
async function reached(ask) {
  try {
    return await ask();
  } catch {
    throw new Error("The program cannot be reached.");
  }
}

/** @param {string} address @returns {Promise<any>} */
export async function read(address) {
  return body(await reached(() => fetch(address, { cache: "no-store", credentials: "same-origin" })));
}

/** @param {string} address @param {object} what @returns {Promise<any>} */
export async function send(address, what) {
  const meta = document.querySelector('meta[name="token"]');
  const token = meta ? meta.getAttribute("content") || "" : "";
  return body(await reached(() => fetch(address, {
    method: "POST", credentials: "same-origin",
    headers: { "Content-Type": "application/json", "X-Sockline-Token": token },
    body: JSON.stringify(what),
  })));
}

const ranks = ["", "viewer", "tower", "officer", "administrator"];

/** Whether whoever looks at this page may do what a role may. @param {string} role */
export function may(role) {
  const mine = ranks.indexOf(document.body.dataset.role || "");
  return mine > 0 && mine >= ranks.indexOf(role);
}
