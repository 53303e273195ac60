// Talks to the bench: requests, problems, the state stream.

export class Problem extends Error {
  constructor(status, detail) { super(detail); this.status = status; }
}

const KEY = "palmloop-token";
let askForToken = async () => null;
export function onTokenNeeded(ask) { askForToken = ask; }

function headers(more = {}) {
  const token = sessionStorage.getItem(KEY);
  return token ? { ...more, Authorization: `Bearer ${token}` } : more;
}

let asking = null;
async function renewToken() {
  asking ??= askForToken().then((token) => { if (token) sessionStorage.setItem(KEY, token); }).finally(() => { asking = null; });
  await asking;
}

async function send(path, options, more) {
  let reply = await fetch(path, { ...options, headers: headers(more) });
  if (reply.status === 401) {
    await renewToken();
    reply = await fetch(path, { ...options, headers: headers(more) });
  }
  if (!reply.ok) {
    const problem = await reply.json().catch(() => ({ detail: reply.statusText }));
    throw new Problem(reply.status, problem.detail);
  }
  return reply;
}

export async function call(method, path, body) {
  const more = body === undefined ? {} : { "Content-Type": "application/json" };
  const reply = await send(path, { method, body: body === undefined ? undefined : JSON.stringify(body), cache: "no-store" }, more);
  return reply.json();
}

export const get = (path) => call("GET", path);
export const post = (path, body) => call("POST", path, body);

export async function picture(after) {
  const limit = AbortSignal.timeout(5000);
  const reply = await send(`/v1/camera/frame.jpg?overlay=false&after=${after}`, { cache: "no-store", signal: limit });
  return { version: Number(reply.headers.get("Picture-Version")), bitmap: await createImageBitmap(await reply.blob()) };
}

// Server-sent events by fetch, because EventSource cannot send a token. Calls heard(name, value); comes back by itself.
export async function listen(path, heard, silenceMs = 6000) {
  let lastId = null;
  for (;;) {
    const stop = new AbortController();
    let timer = null;
    const alive = () => { clearTimeout(timer); timer = setTimeout(() => stop.abort(), silenceMs); };
    try {
      alive();
      const reply = await send(path, { cache: "no-store", signal: stop.signal }, lastId ? { "Last-Event-ID": lastId } : {});
      const reader = reply.body.pipeThrough(new TextDecoderStream()).getReader();
      let rest = "";
      for (;;) {
        const { value, done } = await reader.read();
        if (done) break;
        alive();
        const blocks = (rest + value).split("\n\n");
        rest = blocks.pop();
        for (const block of blocks) lastId = tell(block, heard) ?? lastId;
      }
    } catch (error) {
      if (error instanceof Problem) heard("trouble", { detail: error.message });
    }
    clearTimeout(timer);
    await new Promise((resume) => setTimeout(resume, 1000));
  }
}

function tell(block, heard) {
  let name = "message", data = "", id = null;
  for (const line of block.split("\n")) {
    if (line.startsWith("event: ")) name = line.slice(7);
    else if (line.startsWith("data: ")) data += line.slice(6);
    else if (line.startsWith("id: ")) id = line.slice(4);
  }
  if (data) heard(name, JSON.parse(data));
  return id;
}
