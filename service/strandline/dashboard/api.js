// Requests to the service: the token, problem details (RFC 9457), and the stream of moments read from a response body.
// No element of the page is touched here; whoever asks for a token is handed in.

const TOKEN_KEY = "strandline-token";
const SILENT_AT_MOST_MS = 6000; // two moments a second are due: after so long without one the stream is taken for dead
const RETRY_FIRST_MS = 500,
  RETRY_AT_MOST_MS = 5000;

/** A refusal or a failure in the service's words. `status` 0: the service could not be reached. */
export class Problem extends Error {
  constructor(status, title, detail) {
    super(detail || title);
    this.status = status;
    this.title = title;
    this.detail = detail;
  }

  /** Whether the same question may be answered a little later: unreachable, too many requests, or a server's fault. */
  get mayPass() {
    return this.status === 0 || this.status === 429 || this.status >= 500;
  }
}

/** Requests with the token of this tab. `askToken(why)` resolves to a token once a person has given one. */
export class Api {
  #asking = null;

  constructor(askToken) {
    this.askToken = askToken;
  }

  /** One request; the response where it is well, else a Problem is thrown. A 401 asks for a token and tries again. */
  async fetch(path, options = {}) {
    for (;;) {
      const token = sessionStorage.getItem(TOKEN_KEY);
      const headers = { ...options.headers, ...(token ? { Authorization: `Bearer ${token}` } : {}) };
      let response;
      try {
        response = await fetch(path, { ...options, headers, cache: "no-store", credentials: "omit" });
      } catch (error) {
        if (error.name === "AbortError") throw error;
        throw new Problem(0, "The service cannot be reached", "It may be restarting. Is the address right?");
      }
      if (response.ok) return response;
      const problem = await problemOf(response);
      if (response.status !== 401 || options.signal?.aborted) throw problem;
      if (token === sessionStorage.getItem(TOKEN_KEY))
        await this.#token(token ? "That token was not accepted." : problem.message);
    }
  }

  /** One dialog however many requests wait for the token. */
  async #token(why) {
    this.#asking ??= this.askToken(why).finally(() => {
      this.#asking = null;
    });
    sessionStorage.setItem(TOKEN_KEY, await this.#asking);
  }

  /** Does this tab have a token? */
  hasToken() {
    return sessionStorage.getItem(TOKEN_KEY) !== null;
  }

  async json(path, options) {
    const response = await this.fetch(path, options);
    try {
      return await response.json();
    } catch {
      throw new Problem(0, "The answer broke off", "The service may be restarting.");
    }
  }

  /** An act: a POST with a JSON body; its answer says nothing but that it is durable. */
  post(path, body) {
    return this.fetch(path, {
      method: "POST",
      headers: { "Content-Type": "application/json" },
      body: JSON.stringify(body),
    });
  }
}

/** What an answer says went wrong. */
async function problemOf(response) {
  try {
    const found = await response.json();
    return new Problem(response.status, found.title ?? `Answer ${response.status}`, found.detail ?? "");
  } catch {
    return new Problem(response.status, `Answer ${response.status}`, response.statusText);
  }
}

/** Cuts a text/event-stream into events. Pure; feed it text as it comes. */
class EventReader {
  #rest = "";

  /** The events that are whole now: [{ event, data }]. */
  read(text) {
    const pieces = (this.#rest + text).split(/\r\n\r\n|\n\n|\r\r/);
    this.#rest = pieces.pop();
    const found = [];
    for (const piece of pieces) {
      let event = "message";
      const data = [];
      for (const line of piece.split(/\r\n|\n|\r/)) {
        if (line.startsWith("data:")) data.push(line.slice(line[5] === " " ? 6 : 5));
        else if (line.startsWith("event:")) event = line.slice(6).trim();
      }
      if (data.length) found.push({ event, data: data.join("\n") });
    }
    return found;
  }
}

/** The live moments of one feed. Reconnects by itself; `onState` hears "connecting", "live", or "lost" and why. */
export class LiveStream {
  #stop = null;

  constructor(api, onMoment, onState) {
    this.api = api;
    this.onMoment = onMoment;
    this.onState = onState;
  }

  /** Follow this path until the next call, or until close(). */
  open(path) {
    this.close();
    const stop = new AbortController();
    this.#stop = stop;
    this.#run(path, stop);
  }

  close() {
    this.#stop?.abort();
    this.#stop = null;
  }

  async #run(path, stop) {
    let wait_ms = RETRY_FIRST_MS;
    while (!stop.signal.aborted) {
      this.onState("connecting", "");
      let why = "The stream ended; the service may be restarting.";
      try {
        await this.#follow(path, stop, () => {
          wait_ms = RETRY_FIRST_MS;
        });
      } catch (error) {
        if (stop.signal.aborted) return;
        why = error instanceof Problem ? `${error.title}. ${error.detail ?? ""}` : "The connection broke.";
      }
      if (stop.signal.aborted) return;
      await this.onState("lost", why); // it may turn out that there is nothing to try again
      if (stop.signal.aborted) return;
      await new Promise((done) => setTimeout(done, wait_ms));
      wait_ms = Math.min(wait_ms * 2, RETRY_AT_MOST_MS);
    }
  }

  /** One connection, until it ends, breaks or falls silent. */
  async #follow(path, stop, onFirst) {
    const own = new AbortController();
    const abort = () => own.abort();
    stop.signal.addEventListener("abort", abort);
    let watchdog = 0,
      reader = null;
    const alive = () => {
      clearTimeout(watchdog);
      watchdog = setTimeout(abort, SILENT_AT_MOST_MS);
    };
    try {
      const response = await this.api.fetch(path, { signal: own.signal, headers: { Accept: "text/event-stream" } });
      reader = response.body.pipeThrough(new TextDecoderStream()).getReader();
      const events = new EventReader();
      for (alive(); ;) {
        const { value, done } = await reader.read();
        if (done || stop.signal.aborted) return;
        alive();
        const found = events.read(value);
        if (found.some((each) => each.event === "gone")) return; // the feed is not at work there any more
        const moments = found.filter((each) => each.event === "moment");
        if (!moments.length) continue;
        onFirst();
        this.onState("live", "");
        this.onMoment(moments[moments.length - 1].data); // of moments that piled up only the newest is worth drawing
      }
    } finally {
      clearTimeout(watchdog);
      stop.signal.removeEventListener("abort", abort);
      own.abort();
    }
  }
}
