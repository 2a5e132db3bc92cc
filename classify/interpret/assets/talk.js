// Talking to the server. An answer that does not come is told apart from one that refuses.

export class Silence extends Error {}

async function ask(path, options) {
  let answer;
  try {
    answer = await fetch(path, { credentials: "same-origin", ...options });
  } catch {
    throw new Silence("the server does not answer");
  }
  const isJson = (answer.headers.get("content-type") || "").startsWith("application/json");
  return { status: answer.status, body: isJson ? await answer.json() : { problem: await answer.text() } };
}

export const get = (path) => ask(path, {});

export const post = (path, content) =>
  ask(path, { method: "POST", headers: { "Content-Type": "application/json" }, body: JSON.stringify(content ?? {}) });
