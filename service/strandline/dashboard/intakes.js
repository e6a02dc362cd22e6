// The intakes of a feed in words: what a broker still holds, what is under way, what is wrong and what to do about it.
// Pure: a moment in, words out.

import { age, clean, count, near } from "./format.js";

const AWAY_AFTER_S = 5, // one that begins, or connects again, needs a moment
  BAD_AFTER_S = 30;

/** What is to be said of intakes on top of the page: brokers that are away, and feeds that take nothing for now. */
export function intakeTrouble(moment, zone) {
  const found = [];
  for (const intake of moment.intakes ?? []) {
    const away_s = (moment.now_ms - intake.since_ms) / 1000;
    if (!intake.connected && away_s > AWAY_AFTER_S) {
      const why = intake.words ? `: ${clean(intake.words)}` : "";
      found.push({
        level: away_s > BAD_AFTER_S ? "bad" : "watch",
        place: "upstream",
        says: ["Intake ", { name: intake.name }, ` has had no broker for ${age(away_s)}${why}. `],
        next: ["Look at the broker and the way to it. What waits there comes by itself once it is back."],
        about: ["intake", intake.name],
        sign: "no broker",
      });
    } else if (intake.paused_until_ms !== null) {
      found.push({
        level: "watch",
        place: "here",
        says: [
          "Intake ",
          { name: intake.name },
          ` waits until ${near(intake.paused_until_ms, moment.now_ms, zone)}: ${clean(intake.last_error ?? "")}. `,
        ],
        next: ["What waits stays at the broker. The reason that the feed gives has an entry in the runbook."],
        about: ["paused", intake.name],
      });
    }
  }
  return found;
}

/** What a feed that has heard nothing yet waits for. */
export function firstWords(moment) {
  const [intake] = moment.intakes ?? [];
  if (!intake) return [`Send events to /v1/feeds/${moment.feed}/events.`];
  return ["Publish to its broker: intake ", { name: intake.name }, " takes what comes there."];
}

/** The state of an intake for the style sheet, and in a shape and words. */
export function intakeState(intake, moment, zone) {
  const since = near(intake.since_ms, moment.now_ms, zone);
  if (!intake.connected) return ["bad", `▲ no broker since ${since}`];
  if (intake.paused_until_ms !== null)
    return ["paused", `❚❚ waits until ${near(intake.paused_until_ms, moment.now_ms, zone)}`];
  return ["fine", `● connected since ${since}`];
}

/** What waits at its broker, and what was taken and is not settled. */
export function intakeWaits({ connected, waiting_messages: waiting, in_flight_messages: flight }) {
  const known = connected && waiting !== null,
    there = waiting === 1 ? "1 message waits there" : `${count(waiting)} messages wait there`;
  return `${known ? there : "what waits there is not known"}, ${count(flight)} in flight`;
}
