// The parts of the page that are words and boxes: the sentence, the six hops, the books, the sinks, what happened.
// A moment in, elements out; only what changed is touched.

import { offerButton } from "./acts.js";
import { byId, keyed, make, nameElement, setAttribute, setSentence, setText } from "./dom.js";
import { age, brief, clean, count, counted, near, share } from "./format.js";
import { pauseWords, waitWords } from "./holding.js";
import { lastAtOrBelow } from "./scales.js";
import { apart, behind_s, SILENT_SHARE } from "./reading.js";
import { spokenText } from "./sentence.js";
import { HOLDS } from "./tide.js";

const SPOKEN_EVERY_MS = 15000,
  SPOKEN_CHANGE_MS = 3000; // a screen reader is told of a change soon, of ages seldom
const QUIET_HOLDS = ["nothing_held", "slack", "slack_set"],
  SLOW_HOLDS = ["slow_source", "promised_source"];
const HAPPENED_AT_MOST = 40,
  SPELL_AT_LEAST_MS = 3000,
  GAP_MS = 2000, // between two holds: longer, and they are two stories
  CATCHES_UP_WITHIN_MS = 2000; // at first the output is as far behind as the hold before it left it

/** The sentence on top, what to do next, and the acts that are offered for it. */
export function showSentence(spoken, moment, openAct) {
  setAttribute(byId("now"), "data-level", spoken.level);
  setSentence(byId("says"), spoken.says);
  setSentence(byId("next"), spoken.next);
  keyed(
    byId("stalls"),
    moment.stalls ?? [],
    (text) => text,
    () => make("li"),
    (element, text) => setText(element, capital(text)),
  );
  const offers = moment.past ? [] : spoken.offers;
  keyed(
    byId("offers"),
    offers,
    (offer) => `${offer.act}|${offer.subject}`,
    (offer) => offerButton(offer.act, offer.subject, openAct),
    () => {},
  );
}

/** A phrase as a sentence. */
function capital(text) {
  return text ? `${text.slice(0, 1).toUpperCase()}${text.slice(1)}.` : "";
}

/** Tells a screen reader the sentence when its sense changes, and now and then as its figures move. */
export class Speaker {
  #key = "";
  #at_ms = -Infinity;

  say(spoken, now_ms) {
    const since_ms = now_ms - this.#at_ms;
    if (since_ms < SPOKEN_CHANGE_MS || (spoken.key === this.#key && since_ms < SPOKEN_EVERY_MS)) return;
    if (spoken.key === this.#key && spoken.level === "fine") return; // that all is still well need not be said again
    this.#key = spoken.key;
    this.#at_ms = now_ms;
    setText(byId("spoken"), `${spokenText(spoken.says)} Next: ${spokenText(spoken.next)}`);
  }
}

const LANE_STORE = "lanes"; // the service's own keeper of the late lane; it refuses to pause it
const REACHES = [
  ["upstream", "Upstream", ["sources"]],
  ["here", "Here", ["ingest", "decode", "journal", "runs", "release"]],
  ["downstream", "Downstream", ["sinks"]],
];

/** The strip of hops from the sources to the stores; the reach where the trouble sits says so. */
export function showHops(moment, spoken) {
  const hops = new Map((moment.hops ?? []).map((hop) => [hop.name, hop])),
    places = spoken.places;
  keyed(
    byId("hops"),
    REACHES,
    ([key]) => key,
    makeReach,
    (element, [key, , names]) => {
      const trouble = places.includes(key);
      setAttribute(element, "data-trouble", trouble ? (spoken.place === key ? spoken.level : "watch") : null);
      const sign = (key === "upstream" && spoken.upstream) || "trouble";
      setText(element.verdict, trouble ? `▲ ${sign}` : "✓ clear");
      for (const name of names) showHop(element.hops.get(name), name, hops.get(name), moment);
    },
  );
}

function makeReach([key, title, names]) {
  const element = make("section", `reach reach-${key}`),
    head = make("h3", "", title);
  element.verdict = make("span", "verdict");
  head.append(" ", element.verdict);
  const list = make("ol", "hop-list");
  element.hops = new Map(
    names.map((name) => {
      const item = make("li", "hop"),
        title_ = make("span", "hop-name", name);
      item.waits = make("span", "hop-waits");
      item.rate = make("span", "hop-rate");
      item.append(title_, item.waits, item.rate);
      list.append(item);
      return [name, item];
    }),
  );
  element.append(head, list);
  return element;
}

function showHop(item, name, hop, moment) {
  if (name === "sources") {
    const rest = moment.rest,
      known = rest ? rest.sources + moment.lanes.length : moment.lanes.length;
    const { active, sources: silent } = moment.silence ?? {};
    setText(item.waits, moment.past ? "–" : counted(known, "source"));
    setText(
      item.rate,
      moment.past || !moment.silence ? "" : `${count(active)} active${silent ? `, ${count(silent)} silent` : ""}`,
    );
    return;
  }
  if (!hop) {
    setText(item.waits, "–");
    setText(item.rate, "");
    return;
  }
  setText(
    item.waits,
    hop.waiting ? `${brief(hop.waiting)} wait${hop.oldest_s !== null ? `, ${age(hop.oldest_s)}` : ""}` : "none",
  );
  setText(item.rate, hop.rate_per_s === null || hop.rate_per_s === undefined ? "" : `${brief(hop.rate_per_s)}/s`);
  setAttribute(item, "data-waits", hop.waiting ? "yes" : null);
}

const BOOKS = [
  ["released", "released"],
  ["late", "late"],
  ["duplicate", "duplicate"],
  ["quarantined", "quarantined"],
  ["buffered", "buffered"],
];

/** The ledger: what came in stands against what became of it. */
export function showBooks(moment) {
  const ledger = moment.ledger ?? {},
    says = byId("books-says");
  const sum = BOOKS.reduce((total, [key]) => total + (ledger[key] ?? 0), 0);
  const balanced = ledger.balanced ?? sum === ledger.received;
  setText(says, balanced ? "= balanced" : `≠ off by ${count(Math.abs((ledger.received ?? 0) - sum))}`);
  setAttribute(says, "data-balanced", balanced ? "yes" : "no");
  keyed(
    byId("books"),
    [["received", "received"], ...BOOKS],
    ([key]) => key,
    ([key, word]) => {
      const row = make("div", `book book-${key}`);
      row.value = make("dd");
      row.bar = make("span", "book-bar");
      row.append(
        make("dt", "", key === "received" ? word : `${key === "released" ? "=" : "+"} ${word}`),
        row.value,
        row.bar,
      );
      return row;
    },
    (row, [key]) => {
      setText(row.value, count(ledger[key] ?? null));
      const part = ledger.received ? (ledger[key] ?? 0) / ledger.received : 0;
      const width = part > 0 ? `${Math.max(1, Math.round(part * 1000) / 10)}%` : "0%";
      if (row.bar.style.inlineSize !== width) row.bar.style.inlineSize = width;
    },
  );
}

/** The sinks: what each does, what waits for it, what it said, and the acts on it. */
export function showSinks(moment, zone, openAct) {
  setText(byId("sinks-says"), moment.past && !moment.sinks.length ? "not kept of that time" : "");
  keyed(
    byId("sinks"),
    moment.sinks,
    (sink) => sink.name,
    (sink) => makeSink(sink, openAct),
    (item, sink) => {
      const [state, word] = sinkState(sink);
      setAttribute(item, "data-state", state);
      setText(item.state, word);
      item.button.hidden = sink.name === LANE_STORE;
      item.button.disabled = Boolean(moment.past); // what was then can no longer be acted on
      setText(
        item.waits,
        sink.waiting_events
          ? `${waitWords(sink.waiting_events)}, the oldest ${age(sink.oldest_s)}`
          : "nothing waits",
      );
      const since = sink.failing_since_ms
        ? `failing since ${near(sink.failing_since_ms, moment.now_ms, zone)}: `
        : "";
      const error = sink.last_error && state !== "fine" ? [`${since}${clean(sink.last_error)}`] : [];
      const paused = state === "paused" ? ["Paused", ...pauseWords(moment, sink.name, zone), ". "] : [];
      setSentence(item.error, [...paused, ...error]);
      setText(item.button, sink.paused ? "Resume…" : "Pause…");
      item.button.act = sink.paused ? "resume" : "pause";
    },
  );
}

function makeSink(sink, openAct) {
  const item = make("li", "sink");
  item.state = make("span", "sink-state");
  item.waits = make("span", "sink-waits");
  item.error = make("span", "sink-error");
  item.button = make("button");
  item.button.type = "button";
  item.button.setAttribute("aria-label", `Pause or resume sink ${sink.name}`);
  item.button.addEventListener("click", () => openAct(item.button.act, sink.name));
  const head = make("div", "sink-head");
  head.append(nameElement(sink.name), item.state, item.button);
  item.append(head, item.waits, item.error);
  if (sink.name === LANE_STORE) item.append(make("span", "sink-waits", "keeps the late lane and the quarantine"));
  return item;
}

function sinkState(sink) {
  if (sink.paused) return ["paused", "❚❚ paused"];
  if (sink.failing_since_ms !== null && sink.failing_since_ms !== undefined) return ["bad", "▲ failing"];
  if (!sink.connected) return ["watch", "○ not connected"];
  return ["fine", "● taking"];
}

/** Acts and holds, the newest first. */
export function showHappened(record, moment, zone) {
  const now_ms = moment.now_ms,
    apart_s = apart(moment);
  const spells = whole(record.holds, moment.idle_after_s)
    .filter((hold) => hold.to_ms - hold.from_ms >= SPELL_AT_LEAST_MS && wasFelt(record, hold, apart_s))
    .map((hold) => ({ at_ms: hold.from_ms, hold }));
  const acts = record.acts.map((act) => ({ at_ms: act.at_ms, act }));
  const all = [...spells, ...acts]
    .filter((each) => each.at_ms <= now_ms)
    .sort((one, other) => other.at_ms - one.at_ms);
  const shownNow = all.slice(0, HAPPENED_AT_MOST);
  keyed(
    byId("happened"),
    shownNow.length ? shownNow : [{ at_ms: 0, none: true }],
    keyOfHappening,
    (each) => make("li", each.act ? "happened-act" : "happened-hold"),
    (element, each) => setSentence(element, happeningWords(each, now_ms, zone)),
  );
}

/**
 * Holds, oldest first. A source that falls silent is called slow at first, for a quarter of idle_after: its hold begins
 * with its last word, as the sentence on top says ("silent since"), and what it held before that as a slow one stays.
 */
export function whole(holds, idle_after_s) {
  const found = [];
  for (const hold of holds) {
    const last = found[found.length - 1];
    const silent = last?.why === "slow_source" && hold.why === "silent_source" && last.source === hold.source;
    if (!silent || hold.from_ms - last.to_ms >= GAP_MS) {
      found.push(hold);
      continue;
    }
    const heard_ms = hold.heard_ms ?? hold.from_ms - idle_after_s * SILENT_SHARE * 1000;
    if (last.from_ms < heard_ms) found[found.length - 1] = { ...last, to_ms: heard_ms };
    else found.pop();
    found.push({ ...hold, from_ms: heard_ms });
  }
  return found;
}

/** Did a hold keep the output further behind than the slack does? Somebody is the slowest at any time. */
function wasFelt(record, hold, apart_s) {
  if (QUIET_HOLDS.includes(hold.why)) return false;
  if (!SLOW_HOLDS.includes(hold.why)) return true;
  let index = lastAtOrBelow(record.t_ms, hold.to_ms);
  const from_ms = hold.from_ms + CATCHES_UP_WITHIN_MS;
  for (; index >= 0 && record.t_ms[index] >= from_ms; index -= 1) {
    if (record.behind_s[index] - record.slack_s[index] > apart_s) return true;
  }
  return false;
}

function keyOfHappening(each) {
  if (each.none) return "none";
  return each.act
    ? `a|${each.at_ms}|${each.act.act}|${each.act.subject}`
    : `h|${each.at_ms}|${each.hold.why}|${each.hold.source}`;
}

function happeningWords({ none, at_ms, act, hold }, now_ms, zone) {
  if (none) return ["Nothing but the slack held the output, and nobody acted, as far as is kept."];
  const when = `${near(at_ms, now_ms, zone)}  `;
  if (hold) {
    const who = hold.source
      ? [{ name: hold.source }, `: ${HOLDS[hold.why]?.[0] ?? hold.why}`]
      : [HOLDS[hold.why]?.[0] ?? hold.why];
    return [when, ...who, `, ${age((hold.to_ms - hold.from_ms) / 1000)}`];
  }
  const ended = act.act === "slack" && act.slack_s === null;
  const how = ended ? "as configured again" : act.act === "slack" ? `to ${age(act.slack_s)}` : "";
  const until = act.until ? `, until ${untilWords(act.until, now_ms, zone)}` : "";
  return [
    when,
    "⚑ ",
    `${act.act} `,
    act.subject ? { name: act.subject } : "",
    `${how}${until}${act.subject || how ? " " : ""}by `,
    { name: act.who || "somebody" },
    act.reason ? `: ${clean(act.reason)}` : "",
  ];
}

function untilWords(until, now_ms, zone) {
  const ms = typeof until === "number" ? until : Date.parse(until);
  return Number.isFinite(ms) ? near(ms, now_ms, zone) : String(until);
}

/** The rest of the sources, summed, and the words beside the small pictures. */
export function showWords(moment, record) {
  const rest = moment.rest;
  setText(
    byId("rest"),
    !rest || moment.past
      ? ""
      : rest.sources
        ? `And ${counted(rest.sources, "more source")}: ${count(rest.active)} active, ${count(rest.silent)} silent, ` +
          `${counted(rest.held_events, "event")} held.`
        : "These are all sources.",
  );
  const sought = moment.lanes.some((lane) => lane.found !== undefined),
    found = moment.lanes.filter((lane) => lane.found).length;
  setText(byId("found"), sought ? `${counted(found, "source")} found; the holder and grey ones beside them.` : "");
  setText(
    byId("runs-says"),
    `${counted(moment.held.open_runs, "open run")}, ${counted(moment.held.events, "event")} held` +
      `${moment.held.oldest_ms ? `, the oldest for ${age((moment.now_ms - moment.held.oldest_ms) / 1000)}` : ""}.`,
  );
  const behind = behind_s(moment);
  setText(
    byId("behind-says"),
    behind === null ? "no output yet" : `${age(behind)} behind, slack ${age(moment.slack_s)}`,
  );
  setText(
    byId("lateness-says"),
    `Slack ${age(moment.slack_s)}; ${brief(moment.rates?.late_per_s ?? 0)} late a second`,
  );
  setText(byId("share-says"), shareWords(moment, record));
}

function shareWords(moment, record) {
  const steering = moment.steering;
  if (!steering) {
    const now = record.late_share[lastAtOrBelow(record.t_ms, moment.now_ms)];
    const nothing = moment.minute?.duplicate ? "nothing new came" : "nothing came";
    const known = now === null || now === undefined ? nothing : share(now);
    return `${known} in the minute before${moment.past ? "" : "; the slack is fixed, so there is no target"}`;
  }
  const bound = steering.bound_this_stretch === null ? "" : ` ± ${share(steering.bound_this_stretch)} at the most`;
  return (
    `minute ${share(steering.late_share_last_minute)}, hour ${share(steering.late_share_last_hour)}, ` +
    `begun ${share(steering.late_share_since_begin)}; target ${share(steering.late_share_target)}${bound}. ` +
    capital(steering.explanation)
  );
}
