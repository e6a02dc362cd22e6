// What is known of a feed's past, as columns: filled from the service's history, lengthened by each live moment, and
// asked what the feed looked like at an instant. Pure: no DOM, no requests, no clock.

import { laneOf } from "./reading.js";
import { lastAtOrBelow } from "./scales.js";

const POINTS_AT_MOST = 4000; // twice a second: half an hour; older points are dropped and fetched again when looked at
const MOMENTS_AT_MOST = 360; // whole moments with strands, kept for the last three minutes
const ACTS_AT_MOST = 500;
const GAP_MS = 5000; // between two points: longer, and nobody knows what was between
const MINUTE_MS = 60000;
const COLUMNS = ["t_ms", "behind_s", "newest_age_s", "slack_s", "late", "judged", "late_share", "rows"];

/** The past of one feed. All columns have one entry for each of `t_ms` (ascending): when a step ends. */
export class Record {
  constructor() {
    this.clear();
  }

  clear() {
    for (const name of COLUMNS) this[name] = [];
    this.holds = [];
    this.acts = [];
    this.edges_s = [];
    this.moments = [];
    this.history = null;
    this.ledger = null;
    this.step_ms = 500;
  }

  /** Take over what the service has kept; live points that are newer than its last one stay. */
  load(history) {
    const step_ms = (history.step_s ?? 1) * 1000,
      times = history.t_ms.map((each) => each + step_ms);
    const end_ms = times[times.length - 1] ?? -Infinity,
      from = lastAtOrBelow(this.t_ms, end_ms) + 1;
    const live = Object.fromEntries(COLUMNS.map((name) => [name, this[name].slice(from)]));
    const past = {
      t_ms: times,
      behind_s: history.watermark_ms.map((each, index) => secondsBetween(each, times[index])),
      newest_age_s: history.newest_ms.map((each, index) => secondsBetween(each, times[index])),
      slack_s: history.slack_s,
      late: history.late,
      judged: history.received.map((each, index) => each - history.duplicate[index] - history.quarantined[index]),
      rows: history.lateness.rows,
    };
    for (const name of Object.keys(past)) this[name] = [...past[name], ...live[name]];
    this.late_share = rollingShare(this);
    this.history = { ...history, ends_ms: times, step_ms };
    this.edges_s = history.lateness.edges_s;
    this.step_ms = step_ms;
    const newer = this.holds.filter((hold) => hold.to_ms > end_ms);
    this.holds = holdsOf(history, end_ms);
    for (const hold of newer) this.#hold(Math.max(hold.from_ms, end_ms), hold.to_ms, hold.why, hold.source);
    this.acts = mergedActs(this.acts, history.acts ?? []);
  }

  /** One live moment. */
  append(moment) {
    if (moment.now_ms <= (this.moments[this.moments.length - 1]?.now_ms ?? -Infinity)) return;
    this.moments.push(moment);
    if (this.moments.length > MOMENTS_AT_MOST) this.moments.splice(0, MOMENTS_AT_MOST / 6);
    const last_ms = this.t_ms[this.t_ms.length - 1] ?? -Infinity;
    if (moment.now_ms <= last_ms) return; // within a step of the history that is not over: 3 min, where a day is seen
    const ledger = moment.ledger,
      before = this.ledger && this.ledger.received <= ledger.received ? this.ledger : ledger;
    const judged = (each) => each.received - each.duplicate - each.quarantined;
    this.ledger = ledger;
    this.t_ms.push(moment.now_ms);
    this.behind_s.push(secondsBetween(moment.watermark_ms, moment.now_ms));
    this.newest_age_s.push(secondsBetween(moment.newest_ms, moment.now_ms));
    this.slack_s.push(moment.slack_s);
    this.late.push(ledger.late - before.late);
    this.judged.push(judged(ledger) - judged(before));
    this.late_share.push(shareUpTo(this, this.t_ms.length - 1));
    this.rows.push(moment.lateness.counts);
    this.edges_s = moment.lateness.edges_s;
    const since_ms = last_ms > moment.now_ms - GAP_MS ? last_ms : moment.now_ms;
    this.#hold(since_ms, moment.now_ms, moment.hold.why, moment.hold.source, moment.hold.since_ms);
    if (moment.hold.why === "silent_source")
      this.holds[this.holds.length - 1].heard_ms = laneOf(moment, moment.hold.source)?.heard_ms ?? null;
    this.acts = mergedActs(this.acts, moment.acts ?? []);
    if (this.t_ms.length > POINTS_AT_MOST) this.#trim();
  }

  /** `begun_ms`: when the hold began as the service says, between two moments as a rule. */
  #hold(from_ms, to_ms, why, source, begun_ms = from_ms) {
    const last = this.holds[this.holds.length - 1];
    if (last && last.why === why && last.source === (source ?? null) && from_ms - last.to_ms < GAP_MS)
      last.to_ms = to_ms;
    else {
      const begin_ms = Math.max(from_ms, Math.min(to_ms, begun_ms ?? from_ms));
      if (last && last.to_ms === from_ms) last.to_ms = begin_ms; // no gap between the two
      this.holds.push({ from_ms: begin_ms, to_ms, why, source: source ?? null });
    }
  }

  #trim() {
    for (const name of COLUMNS) this[name].splice(0, POINTS_AT_MOST / 10);
    this.holds = this.holds.filter((hold) => hold.to_ms >= this.t_ms[0]);
  }

  /** How late events came, summed over steps: [{ from_ms, to_ms, counts, slack_s }] within a stretch. */
  latenessColumns(from_ms, to_ms, step_ms) {
    const found = [];
    let column = null;
    const first = Math.max(0, lastAtOrBelow(this.t_ms, from_ms));
    for (let index = first; index < this.t_ms.length && this.t_ms[index] <= to_ms + step_ms; index += 1) {
      const row = this.rows[index],
        end_ms = Math.ceil(this.t_ms[index] / step_ms) * step_ms;
      if (column === null || column.to_ms !== end_ms) {
        column = { from_ms: end_ms - step_ms, to_ms: end_ms, counts: new Array(row.length).fill(0), slack_s: 0 };
        found.push(column);
      }
      column.slack_s = this.slack_s[index] ?? column.slack_s;
      for (let at = 0; at < row.length; at += 1) column.counts[at] += row[at];
    }
    return found;
  }

  /** The feed as it was: a whole moment where one is kept, else what the history has; null for nothing. */
  momentAt(ms, present) {
    const kept = lastAtOrBelow(
      this.moments.map((each) => each.now_ms),
      ms,
    );
    if (kept >= 0 && ms - this.moments[kept].now_ms < GAP_MS) return { ...this.moments[kept], past: true };
    const history = this.history;
    let index = history ? lastAtOrBelow(history.ends_ms, ms) : -1;
    if (index < 0 && history?.t_ms[0] <= ms) index = 0; // within the first step: its end is the nearest that is known
    if (index < 0 || ms - history.ends_ms[index] > Math.max(GAP_MS, 2 * history.step_ms)) return null;
    return {
      ...present,
      ...pastOf(history, index),
      now_ms: history.ends_ms[index],
      lanes: pastLanes(history, index),
      rest: null,
      intakes: [],
      failure: null,
      state: "running",
      stalls: [],
      past: true,
    };
  }
}

/** The late share over the minute up to each point. */
function rollingShare(record) {
  return record.t_ms.map((_, index) => shareUpTo(record, index));
}

/** Late events of the minute up to a point (or of its own step, where that is longer), as a share; null for none. */
function shareUpTo(record, index) {
  let late = 0,
    judged = 0;
  for (let at = index; at >= 0 && (at === index || record.t_ms[at] > record.t_ms[index] - MINUTE_MS); at -= 1) {
    late += record.late[at];
    judged += record.judged[at];
  }
  return judged > 0 ? late / judged : null;
}

/** What the columns of a history say at one of its points. */
function pastOf(history, index) {
  const at = (name) => history[name][index];
  const end_ms = history.ends_ms[index],
    step_s = history.step_ms / 1000;
  const spell = (history.holds ?? []).find((hold) => hold.from_ms <= end_ms && (hold.to_ms ?? Infinity) >= end_ms);
  const since_ms = spell?.from_ms ?? end_ms - history.step_ms;
  const hops = Object.entries(history.hops).map(([name, hop]) => ({
    name,
    waiting: hop.waiting[index],
    oldest_s: hop.oldest_s[index],
    last_advanced_ms: null,
    rate_per_s: null,
  }));
  return {
    watermark_ms: at("watermark_ms"),
    newest_ms: at("newest_ms"),
    slack_s: at("slack_s"),
    steering: null,
    hold: {
      why: at("hold_why"),
      source: at("hold_source"),
      sink: spell?.sink ?? null,
      idle_ms: null,
      since_ms,
      for_s: (end_ms - since_ms) / 1000,
      explanation: "",
    },
    held: { events: at("held"), oldest_ms: null, open_runs: at("open_runs"), longest_runs: [] },
    ledger: { balanced: at("balanced") },
    hops,
    sinks: [],
    slacks: [],
    silence: null,
    minute: null,
    rates: {
      received_per_s: at("received") / step_s,
      released_per_s: at("released") / step_s,
      late_per_s: at("late") / step_s,
    },
  };
}

/** Lanes as the history kept them: the newest event of each source. */
function pastLanes(history, index) {
  const holder = history.hold_source[index];
  return Object.entries(history.lanes)
    .map(([source, lane]) => ({
      source,
      role: source === holder ? "holding" : "other",
      newest_ms: lane.newest_ms[index],
      heard_ms: null,
      active: true,
      excused: false,
      promised_ms: null,
      held_events: null,
      strands: [],
      late: [],
    }))
    .filter((lane) => lane.newest_ms !== null)
    .sort((one, other) => (other.role === "holding") - (one.role === "holding") || one.newest_ms - other.newest_ms);
}

function secondsBetween(time_ms, now_ms) {
  return time_ms === null ? null : Math.max(0, (now_ms - time_ms) / 1000);
}

/** Who held, oldest first, without gaps: what is not told of as held was not. */
function holdsOf(history, end_ms) {
  return [...(history.holds ?? [])]
    .reverse()
    .map((hold) => ({
      from_ms: hold.from_ms,
      to_ms: hold.to_ms ?? end_ms,
      why: hold.why,
      source: hold.source ?? hold.sink ?? null,
    }));
}

/** Acts of both lists, each once, the oldest first. */
function mergedActs(known, more) {
  const key = (act) => `${act.at_ms}|${act.act}|${act.subject}`;
  const all = new Map([...known, ...more].map((act) => [key(act), act]));
  if (all.size === known.length) return known;
  return [...all.values()].sort((one, other) => one.at_ms - other.at_ms).slice(-ACTS_AT_MOST);
}
