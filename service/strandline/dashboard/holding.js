// Who holds the output, since when, why, and what to do about it, in words: a function for each of the reasons.
// Pure: a moment in; out comes { level, place, says, next, offers }, as `sentence` puts it together.

import { age, count, counted, near, shown } from "./format.js";
import { behind_s, CURRENT_WITHIN_S, isCurrent, laneOf, pauseOf } from "./reading.js";

const REASON_AT_MOST = 80; // graphemes of what somebody gave as a reason

/** Who holds the output, since when, and why. */
export function holdTrouble(moment, zone) {
  const hold = moment.hold,
    source = hold?.source ?? null;
  const build = {
    slow_source: slowSource,
    silent_source: silentSource,
    expected_source: expectedSource,
    promised_source: promisedSource,
    all_silent: allSilent,
    sink_full: sinkFull,
    sink_paused: sinkPaused,
    slack: plainSlack,
    slack_set: plainSlack,
    hold_at_most: longestHold,
    stopped: wasStopped,
  }[hold?.why];
  return build ? [build(moment, source, zone)] : [];
}

function plainSlack(moment) {
  const late_s = (behind_s(moment) ?? 0) - moment.slack_s;
  if (isCurrent(moment)) {
    const how =
      moment.hold.why === "slack_set"
        ? `It waits the slack of ${age(moment.slack_s)} that was set by hand. `
        : `That is as set: it waits the slack of ${age(moment.slack_s)} for stragglers. `;
    const says =
      late_s <= CURRENT_WITHIN_S
        ? how
        : `${age(moment.slack_s)} of it is the slack; the sources are ${age(late_s)} apart. `;
    return { level: "fine", place: "none", says: [says], next: ["Nothing to do."] };
  }
  return {
    level: "watch",
    place: "upstream",
    says: [`${age(moment.slack_s)} of it is slack; the newest event is ${age(late_s)} old itself. `],
    next: ["The delay is upstream: look at what sends to this feed, and at its link."],
  };
}

function slowSource(moment, source) {
  const lane = laneOf(moment, source);
  const lag =
    lane && lane.newest_ms !== null && moment.newest_ms !== null ? (moment.newest_ms - lane.newest_ms) / 1000 : null;
  if (isCurrent(moment)) return plainSlack(moment); // whoever is a little behind now changes twice a second
  const says = [
    { name: source },
    ` holds it, for ${age(moment.hold.for_s)}: `,
    lag === null
      ? "it is the source furthest behind. "
      : `its newest event is ${age(lag)} behind the newest of all. `,
  ];
  return {
    level: "watch",
    place: "upstream",
    says,
    next: [
      "Look at ",
      { name: source },
      " or its link. To stop waiting for it until it speaks again, excuse it: what it still sends may be late.",
    ],
    offers: [{ act: "excuse", subject: source }],
  };
}

function silentSource(moment, source, zone) {
  const lane = laneOf(moment, source);
  const heard_ms = lane?.heard_ms ?? moment.hold.since_ms;
  const silent_s = (moment.now_ms - heard_ms) / 1000;
  const idle_ms = moment.hold.idle_ms ?? null,
    idle_s = idle_ms === null ? null : (idle_ms - moment.now_ms) / 1000;
  const says = [
    { name: source },
    ` holds it: silent since ${near(heard_ms, moment.now_ms, zone)} (${age(silent_s)})`,
    idle_s === null ? ". " : idle_s > 0 ? `; it falls idle in ${age(idle_s)}. ` : "; it falls idle now. ",
  ];
  return {
    level: "watch",
    place: "upstream",
    says,
    next:
      idle_s !== null && idle_s < 10
        ? ["Wait: the output goes on without it in a moment."]
        : [
            "Look at ",
            { name: source },
            " or its link. If it will not be back soon, excuse it: the output goes on without it.",
          ],
    offers: [{ act: "excuse", subject: source }],
  };
}

function expectedSource(moment, source) {
  return {
    level: "watch",
    place: "upstream",
    says: [{ name: source }, ` holds it: it is expected and has not been heard for ${age(moment.hold.for_s)}. `],
    next: ["Start ", { name: source }, ", or excuse it: the output goes on without it until it speaks."],
    offers: [{ act: "excuse", subject: source }],
  };
}

/** Sources that are expected, have never been heard, and are no longer waited for. */
export function missingTrouble(moment) {
  const missing = (moment.lanes ?? []).filter((lane) => lane.role === "expected" && !lane.active);
  if (!missing.length) return [];
  const [{ source }] = missing,
    many = missing.length > 1 ? [` and ${counted(missing.length - 1, "other")}`] : [];
  return [
    {
      level: "watch",
      place: "upstream",
      says: [{ name: source }, ...many, " never came though expected; the output goes on without. "],
      next: ["Start ", { name: source }, ", or excuse it if it will not come."],
      offers: [{ act: "excuse", subject: source }],
    },
  ];
}

/**
 * Does a silence need a person? Yes while a source that was heard, and is no longer waited for (idle, or excused), has
 * been silent for less than a day: until then somebody may bring it back. Told calmly, without a colour, is:
 * who has been silent for a day or longer, for that is known by then; who was excused before it ever came; and every
 * silence where more than half of the sources have been silent for an hour or longer, for then they come and go.
 */
function needsSomebody(silence) {
  return silence.recent > 0 && 2 * silence.hour <= silence.known;
}

/** Sources that were known and are silent, and that nothing waits for: what is late or lost there no hold tells. */
export function silenceTrouble(moment) {
  const silence = moment.silence;
  if (!silence?.sources || !silence.active) return []; // where nobody speaks, that is said of the feed
  const pressing = needsSomebody(silence),
    [says, next] = silence.sources === 1 ? oneSilent(moment, silence) : severalSilent(moment, silence);
  return [
    {
      level: pressing ? "watch" : "fine",
      place: pressing ? "upstream" : "none",
      says,
      next,
      aside: !pressing, // said after the state of the feed, not instead of it
      but: true,
      about: ["silence", silence.source],
      sign: `${count(silence.sources)} silent`,
    },
  ];
}

function silentFor(moment, silence) {
  return age((moment.now_ms - silence.heard_ms) / 1000);
}

function oneSilent(moment, silence) {
  const who = { name: silence.source };
  if (silence.heard_ms === null) return [[who, " is excused and never came. "], ["Nothing to do."]];
  const lasting = silentFor(moment, silence);
  return [
    silence.excused
      ? [who, ` is excused and has been silent for ${lasting}. `]
      : [who, ` has been silent for ${lasting} and is not waited for. `],
    [
      "Look at ",
      who,
      " or its link. Once it speaks again it is waited for; what it held back of this time comes late.",
    ],
  ];
}

function severalSilent(moment, silence) {
  const many = `${count(silence.sources)} of ${counted(silence.known, "source")} are silent and not waited for`;
  if (!silence.recent) return [[`${many}, all for a day or longer. `], ["Nothing to do."]];
  const last = ["; ", { name: silence.source }, ` fell silent last, ${silentFor(moment, silence)} ago. `];
  return [
    [many, ...last],
    [
      "Look at the grey lanes: what do they have in common? ",
      "If they only send seldom, a longer idle_after waits for them.",
    ],
  ];
}

function allSilent(moment) {
  return {
    level: "watch",
    place: "upstream",
    says: [
      `No source has spoken for ${age(moment.hold.for_s)}; `,
      `${counted(moment.held.events, "event")} still held. `,
    ],
    next: [
      `What is held comes out by itself at hold_at_most (${age(moment.hold_at_most_s)}). `,
      "Drain the feed to have it now. ",
      "Look upstream: all sources fell silent.",
    ],
    offers: [{ act: "drain", subject: moment.feed }],
  };
}

function promisedSource(moment, source) {
  return {
    level: "watch",
    place: "upstream",
    says: [{ name: source }, ` holds it: nothing is known beyond its last promise, for ${age(moment.hold.for_s)}. `],
    next: [
      "Look at ",
      { name: source },
      ": it should send events or another promise. Excuse it to go on without it.",
    ],
    offers: [{ act: "excuse", subject: source }],
  };
}

function longestHold(moment, source) {
  const who = source === null ? ["A source is"] : [{ name: source }, " is"];
  return {
    level: "watch",
    place: "upstream",
    says: [
      ...who,
      ` so far behind that events come out at hold_at_most, for ${age(moment.hold.for_s)}. What it sends now is late. `,
    ],
    next: [
      "Look at ",
      source === null ? "the lanes" : { name: source },
      ". Excuse it, and the others are waited for as usual.",
    ],
    offers: source === null ? [] : [{ act: "excuse", subject: source }],
  };
}

function wasStopped(moment) {
  return {
    level: "watch",
    place: "here",
    says: [`The service has just started; it was stopped for ${age(moment.hold.for_s)}. `],
    next: ["Wait a moment: what was held comes out as the sources speak."],
  };
}

/** "1 event waits", "3 events wait". */
export function waitWords(events) {
  return `${counted(events, "event")} wait${events === 1 ? "s" : ""}`;
}

/** By whom a sink was paused, since when and why, as far as that is known. */
export function pauseWords(moment, sink, zone) {
  const act = pauseOf(moment, sink);
  if (act === null) return [];
  const why = act.reason ? `, “${shown(act.reason.trim().replace(/[.]+$/, ""), REASON_AT_MOST)}”` : "";
  return [" by ", { name: act.who || "somebody" }, ` since ${near(act.at_ms, moment.now_ms, zone)}${why}`];
}

function sinkPaused(moment, _source, zone) {
  return {
    level: "watch",
    place: "downstream",
    says: [
      "Sink ",
      { name: moment.hold.sink ?? "" },
      " holds it: it is paused",
      ...pauseWords(moment, moment.hold.sink, zone),
      ". As much waits for it as may. ",
    ],
    next: ["Resume it as soon as its store is well."],
    offers: moment.hold.sink ? [{ act: "resume", subject: moment.hold.sink }] : [],
  };
}

function sinkFull(moment) {
  const worst = (moment.sinks ?? []).find((sink) => sink.name === moment.hold.sink);
  return {
    level: "bad",
    place: "downstream",
    says: worst
      ? [
          "Sink ",
          { name: worst.name },
          ` holds it: ${counted(worst.waiting_events, "event")} released and not taken. `,
        ]
      : ["A sink holds it: too much is released and not taken. "],
    next: ["Look at the sink's store. Nothing is lost: the journal keeps what waits until it is full."],
  };
}
