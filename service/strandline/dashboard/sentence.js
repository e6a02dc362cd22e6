// What stands on top of the page: one plain sentence on the state of a feed, where the trouble sits, and what to do.
// Pure: a moment in, words out. A sentence is a list of texts and of { name }, so that names can be isolated.

import { age, count, near, share } from "./format.js";
import { firstWords, intakeTrouble } from "./intakes.js";
import { holdTrouble, missingTrouble, pauseWords, silenceTrouble, waitWords } from "./holding.js";
import { behind_s, isCurrent, lastHeard } from "./reading.js";

const WAITS_TOO_LONG_S = 5; // at ingest, decode and journal: an answer takes milliseconds, so this is trouble
const SINK_TOO_LONG_S = 15; // a sink that gathers for some seconds before it writes is still well
const LATE_FACTOR = 1.5; // the late share of the last minute, against its target
const LATE_WITHOUT_TARGET = 0.05; // the late share of the last seconds that is worth a word where none is wanted
const QUIET_AFTER_S = 30; // nothing received for so long is worth a word
const REPEATS_AT_LEAST = 10; // in the last minute: a single body that is sent again is what ids are for
const REPEATS_SHARE = 0.95; // of all that came in the last minute
const PAST = { is: "was", "has been": "had been", "it waits": "it waited" };
const LEVELS = ["fine", "watch", "bad"];

/** All that is to be said of a moment: { level, place, says, next, offers, key }. `beside`: troubles around it. */
export function speak(moment, zone = "utc", beside = []) {
  const around = moment.past ? [] : beside;
  const found = [
    ...around.filter((each) => each.level === "bad"),
    ...hereTrouble(moment),
    ...intakeTrouble(moment, zone),
    ...sinkTrouble(moment, zone),
    ...holdTrouble(moment, zone),
    ...missingTrouble(moment),
    ...repeatTrouble(moment),
    ...silenceTrouble(moment),
    ...lateTrouble(moment),
    ...around.filter((each) => each.level !== "bad"),
  ];
  found.sort((one, other) => LEVELS.indexOf(other.level) - LEVELS.indexOf(one.level));
  const worst = found.find((each) => !each.aside) ?? wellWords(moment);
  if (worst.quiet) found.push(worst);
  const says = worst.first
    ? [...worst.says, { name: moment.feed }, ": ", ...currency(moment, zone).map(uncapitalised)]
    : worst.but
      ? currentBut(moment, zone, worst)
      : [...currency(moment, zone), ...worst.says];
  const others = found.filter((each) => each !== worst && (each.level !== "fine" || each.aside));
  for (const other of others.slice(0, 2)) says.push(...other.says);
  return {
    level: worst.level,
    place: worst.place,
    says: moment.past ? says.map(inThePast) : says,
    next: moment.past ? ["This is how it was. To act, go back to live."] : worst.next,
    offers: moment.past ? [] : (worst.offers ?? []),
    upstream: found.find((each) => each.level !== "fine" && each.sign)?.sign ?? null, // in a word, for the strip
    places: [...new Set(found.filter((each) => each.level !== "fine").map((each) => each.place))],
    key: [
      moment.feed,
      moment.state,
      worst.level,
      worst.place,
      ...(worst.level === "fine" ? [] : (worst.about ?? [moment.hold.why, moment.hold.source])),
    ].join("|"),
  };
}

/** A part of a sentence on what stands, as one on what stood. */
function inThePast(part) {
  if (typeof part !== "string") return part;
  return part
    .replace(" holds it", " held it")
    .replace("; it falls idle", "; it fell idle")
    .replace(/ (is|has been|it waits) /g, (_, words) => ` ${PAST[words]} `)
    .replace(" are ", " were ")
    .replace(" wait ", " waited ");
}

/** Is the output current? The first thing that is said. */
function currency(moment, zone) {
  if (moment.state === "failed") return ["The output has stopped. "];
  const behind = behind_s(moment);
  if (moment.newest_ms === null) return ["Nothing has come yet. "];
  if (behind === null) return ["No output yet. "];
  if (moment.hold?.why === "nothing_held" && moment.held.events === 0) {
    return ["All that came is out. "];
  }
  if (moment.past) return [`At ${near(moment.now_ms, moment.now_ms, zone)} the output was ${age(behind)} behind. `];
  return [moment.watermark_ms > moment.now_ms ? "Output is current. " : `Output is ${age(behind)} behind now. `];
}

/** An output without trouble of its own, and what is amiss all the same. */
function currentBut(moment, zone, worst) {
  const out = moment.hold?.why === "nothing_held" && moment.held.events === 0;
  if (moment.past || moment.state === "failed" || !(out || isCurrent(moment)))
    return [...currency(moment, zone), ...worst.says];
  return [out ? "All that came is out, but " : "Output is current, but ", ...worst.says];
}

/** Trouble in this process: a failed feed, books that do not balance, a journal that does not answer. */
function hereTrouble(moment) {
  const found = [];
  if (moment.failure) {
    found.push({
      level: "bad",
      place: "here",
      says: [`The feed failed: ${moment.failure}. `],
      next: [
        "Mend the cause (most often the disk), then restart the service. All that was answered is in the journal.",
      ],
    });
  }
  if (moment.state === "stopping") {
    found.push({
      level: "watch",
      place: "here",
      says: ["The service is stopping. "],
      next: ["Wait for it to come back; this page reconnects by itself."],
    });
  }
  if (moment.ledger && moment.ledger.balanced === false) {
    found.push({
      level: "bad",
      place: "here",
      says: ["The books do not balance. "],
      next: ["Keep the data directory as it is, take a capture, and read the service's log."],
    });
  }
  for (const hop of moment.hops ?? []) {
    if (!["ingest", "decode", "journal"].includes(hop.name) || !(hop.oldest_s > WAITS_TOO_LONG_S)) continue;
    const why = hop.name === "journal" ? "the disk does not answer" : "the process is short of time";
    found.push({
      level: "bad",
      place: "here",
      says: [`Requests have waited ${age(hop.oldest_s)} at ${hop.name}: ${why}. `],
      next: [
        hop.name === "journal"
          ? "Look at the disk of data_dir: is it full, slow or gone?"
          : "Look at the processor and at how large the bodies are.",
      ],
    });
  }
  return found;
}

/** Trouble at a sink: paused, failing, or taking nothing for long. */
function sinkTrouble(moment, zone) {
  const found = [];
  for (const sink of moment.sinks ?? []) {
    const many = sink.waiting_events,
      waits = many ? `${waitWords(many)} for it` : "nothing waits for it yet";
    if (sink.paused) {
      found.push({
        level: "watch",
        place: "downstream",
        says: [
          "Sink ",
          { name: sink.name },
          " is paused",
          ...pauseWords(moment, sink.name, zone),
          `. ${capitalised(waits)}. `,
        ],
        next: ["Resume it when its store is well again: the journal keeps what waits until it is full."],
        offers: [{ act: "resume", subject: sink.name }],
      });
    } else if (sink.failing_since_ms !== null && sink.failing_since_ms !== undefined) {
      const since = near(sink.failing_since_ms, moment.now_ms, zone);
      const ago = age((moment.now_ms - sink.failing_since_ms) / 1000);
      found.push({
        level: "bad",
        place: "downstream",
        says: ["Sink ", { name: sink.name }, ` has failed since ${since} (${ago}); ${waits}. `],
        next: [`Look at its store. It said: ${sink.last_error ?? "nothing"}. What is released waits in the journal.`],
        offers: [{ act: "pause", subject: sink.name }],
      });
    } else if (sink.waiting_events > 0 && sink.oldest_s > SINK_TOO_LONG_S) {
      found.push({
        level: "watch",
        place: "downstream",
        says: ["Sink ", { name: sink.name }, ` has taken nothing for ${age(sink.oldest_s)}; ${waits}. `],
        next: ["Look at its store: is it slow, or locked?"],
        offers: [{ act: "pause", subject: sink.name }],
      });
    }
  }
  return found;
}

/** More late events than wanted, or a target and a longest wait that contradict each other. */
function lateTrouble(moment) {
  const steering = moment.steering;
  if (!steering) return lateWithoutTarget(moment);
  if (steering.contradiction) {
    return [
      {
        level: "watch",
        place: "upstream",
        says: [
          `A late share of ${share(steering.late_share_target)} needs more than the longest wait `,
          `of ${age(steering.at_most_s)}. `,
        ],
        next: [
          `Allow a longer wait, or accept about ${share(steering.attainable_late_share)} late. `,
          "Below: what each slack would give.",
        ],
        offers: [{ act: "slack", subject: moment.feed }],
      },
    ];
  }
  const minute = steering.late_share_last_minute;
  if (minute === null || minute === undefined || minute <= steering.late_share_target * LATE_FACTOR) return [];
  return [
    {
      level: "watch",
      place: "upstream",
      says: [`${share(minute)} came late in the last minute; wanted is ${share(steering.late_share_target)}. `],
      next: ["The slack is being raised by itself. Look at the lanes with late marks: who sends late?"],
    },
  ];
}

/** A fixed slack names no share that is wanted; but so much late is said, and what to do about it. */
function lateWithoutTarget(moment) {
  const { received_per_s: received, late_per_s: late } = moment.rates ?? {};
  if (!(received > 0) || !(late > received * LATE_WITHOUT_TARGET)) return [];
  return [
    {
      level: "watch",
      place: "upstream",
      says: [`${share(Math.min(1, late / received))} of what came just now was late. `],
      next: ["Look at the lanes with late marks: who sends late? Every slack at once tells what a longer one gives."],
      offers: [{ act: "slack", subject: moment.feed }],
    },
  ];
}

/** Nearly all that comes has come before: the books are right, and yet nothing new comes out. */
function repeatTrouble(moment) {
  const { received, duplicate } = moment.minute ?? {};
  if (!(duplicate >= REPEATS_AT_LEAST) || duplicate < received * REPEATS_SHARE) return [];
  return [
    {
      level: "watch",
      place: "upstream",
      says: [
        `Nearly all that comes is a repeat (${count(duplicate)} in the last minute): `,
        "does a sender use its ids again? ",
      ],
      next: [
        "Look at who sends: a counter that began anew after a restart gives new events old ids, and they are dropped. ",
        "If a sender only sends again what it was not sure of, wait: repeats do no harm.",
      ],
      about: ["repeats"],
      sign: "repeats",
    },
  ];
}

function capitalised(text) {
  return text.slice(0, 1).toUpperCase() + text.slice(1);
}

function uncapitalised(text) {
  return text.slice(0, 1).toLowerCase() + text.slice(1);
}

/** Words for a feed without trouble. */
function wellWords(moment) {
  const quiet_s = moment.newest_ms === null ? null : (moment.now_ms - lastHeard(moment)) / 1000;
  if (moment.newest_ms === null) {
    return {
      level: "watch",
      place: "upstream",
      says: ["The feed waits for its first event. "],
      next: firstWords(moment),
    };
  }
  const nobody = moment.silence && moment.silence.known > 0 && moment.silence.active === 0;
  if (quiet_s > QUIET_AFTER_S ? (moment.rates?.received_per_s ?? 0) === 0 : nobody) {
    return {
      quiet: true,
      sign: nobody ? `${count(moment.silence.sources)} silent` : null,
      level: "watch",
      place: "upstream",
      says: [`Nothing has come for ${age(quiet_s)}. `],
      next: ["Is that right at this hour? If not, look upstream: no source is sending."],
    };
  }
  return {
    level: "fine",
    place: "none",
    says: [`The newest event is ${age((moment.now_ms - moment.newest_ms) / 1000)} old. `],
    next: ["Nothing to do."],
  };
}

/** What is said of a frozen time of which nothing is known, and what next; `past`: what the last question came to. */
export function nothingKept(at_ms, when, past) {
  if (past?.at_ms !== at_ms) return [`What is kept of ${when} is being fetched.`, ""];
  const { problem } = past;
  if (!problem)
    return [
      `Nothing is kept of ${when}.`,
      "Go to a later time, or back to live. A day is kept, since the last start of the service.",
    ];
  return [
    `What is kept of ${when} was not given.`,
    `${problem.title}. ${problem.detail ?? ""}${problem.mayPass ? " This page tries again by itself." : ""}`,
  ];
}

/** A sentence as plain text, for a title or for a screen reader. */
export function spokenText(says) {
  return says
    .map((part) => (typeof part === "string" ? part : String(part.name)))
    .join("")
    .trim();
}
