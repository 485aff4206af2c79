// What the daemon is asked, and the token that is shown to it.

const PLACE = "borewake-token";

export const token = {
  get: () => sessionStorage.getItem(PLACE) ?? localStorage.getItem(PLACE),
  set(text, keep) {
    this.clear();
    (keep ? localStorage : sessionStorage).setItem(PLACE, text);
  },
  clear() {
    sessionStorage.removeItem(PLACE);
    localStorage.removeItem(PLACE);
  },
};

export class Refused extends Error {
  constructor(status, detail) {
    super(detail);
    this.status = status;
  }
}

async function ask(path, options = {}) {
  const headers = { ...options.headers };
  const shown = options.token ?? token.get();
  if (shown) headers.authorization = `Bearer ${shown}`;
  const answer = await fetch(path, { ...options, headers, cache: "no-store" });
  if (answer.ok) return answer;
  let detail = answer.statusText;
  try {
    detail = (await answer.json()).detail ?? detail;
  } catch {
    // No problem details: the status must do.
  }
  throw new Refused(answer.status, detail);
}

const query = (asked) =>
  Object.entries(asked ?? {})
    .filter(([, v]) => v !== undefined && v !== null)
    .map(([k, v]) => `${k}=${encodeURIComponent(v)}`)
    .join("&");

export async function get(path, asked, options) {
  const text = query(asked);
  return (await ask(text ? `${path}?${text}` : path, { signal: AbortSignal.timeout(20000), ...options })).json();
}

export async function post(path, body) {
  const headers = { "content-type": "application/json" };
  return (await ask(path, { method: "POST", headers, body: JSON.stringify(body), signal: AbortSignal.timeout(60000) })).json();
}

export const name = (text) => encodeURIComponent(text);

/// Listens for events for ever. EventSource shows no token, so the stream is read here.
export async function listen(after, tell) {
  let last = after;
  for (;;) {
    try {
      const answer = await ask(`/api/v1/events?after=${last}`);
      const reader = answer.body.pipeThrough(new TextDecoderStream()).getReader();
      let text = "";
      for (;;) {
        const { value, done } = await reader.read();
        if (done) break;
        text += value;
        const parts = text.split("\n\n");
        text = parts.pop();
        for (const part of parts) {
          const line = (key) => part.split("\n").find((l) => l.startsWith(`${key}:`))?.slice(key.length + 1).trim();
          const id = line("id");
          if (!id) continue;
          last = Number(id);
          tell(JSON.parse(line("data")));
        }
      }
    } catch {
      // Comes again; the page tells by its own asking that the daemon is gone.
    }
    await new Promise((done) => setTimeout(done, 3000));
  }
}
