// Requests to our own server: one error shape, and the handshake that notices an upgraded server.

export class Problem extends Error {
  constructor(facts, status) {
    super(facts.message);
    this.facts = facts;
    this.status = status;
  }
}

export async function ask(address, options = {}) {
  let answer;
  try {
    answer = await fetch(address, { cache: "no-store", ...options });
  } catch (cause) {
    if (cause.name === "AbortError") throw cause;
    throw new Problem(
      { code: "unreachable", message: "The server does not answer. Is it running?", field: null, value: null, allowed: null },
      0,
    );
  }
  if (answer.ok) return answer;
  let facts;
  try {
    facts = (await answer.json()).error;
  } catch {
    facts = { code: "unreadable", message: `The server answered with status ${answer.status}.`, field: null, value: null, allowed: null };
  }
  throw new Problem(facts, answer.status);
}

export async function askJson(address, options = {}) {
  return (await ask(address, options)).json();
}

export function post(address, body) {
  return askJson(address, {
    method: "POST",
    headers: { "Content-Type": "application/json" },
    body: JSON.stringify(body),
  });
}

export function withQuery(address, query, ...more) {
  const parts = [query, ...more].filter(Boolean);
  return parts.length ? `${address}?${parts.join("&")}` : address;
}

// Ask for a reload once the server's files or solver are not those this page came with.
export async function handshake(boot) {
  try {
    const health = await askJson("health");
    if (health.assets !== boot.assets || health.solver !== boot.solver) {
      document.getElementById("reload").hidden = false;
      return false;
    }
  } catch {
    return true;
  }
  return true;
}
