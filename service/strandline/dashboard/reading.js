// What follows at once from a moment: how far behind it is, whether that is as set, a source's lane. Pure: no words.

export const CURRENT_WITHIN_S = 2; // an output no further behind than its slack and this is called current
// Of idle_after: who has been silent for so long is called silent by the service, before that slow.
export const SILENT_SHARE = 0.25;

/** How many seconds the output is behind the clock; null before there is any. */
export function behind_s(moment) {
  return moment.watermark_ms === null ? null : Math.max(0, (moment.now_ms - moment.watermark_ms) / 1000);
}

/** How many seconds more than the slack an output may be behind and still be called current. */
export function apart(moment) {
  return Math.max(CURRENT_WITHIN_S, (moment.idle_after_s ?? 0) * SILENT_SHARE);
}

/** Is the output as current as the slack allows? */
export function isCurrent(moment) {
  const behind = behind_s(moment);
  return behind !== null && behind - moment.slack_s <= apart(moment);
}

/** The lane of a source among those that the moment shows; null where it is not among them. */
export function laneOf(moment, source) {
  return (moment.lanes ?? []).find((lane) => lane.source === source) ?? null;
}

/** The act that paused a sink: who, why and when; null where it is not among the last acts. */
export function pauseOf(moment, sink) {
  const acts = (moment.acts ?? []).filter((act) => act.act === "pause" && act.subject === sink);
  return acts.reduce((newest, act) => (newest === null || act.at_ms > newest.at_ms ? act : newest), null);
}

/** When anything was heard last, as far as the lanes tell; else the newest event time. */
export function lastHeard(moment) {
  const heard = (moment.lanes ?? [])
    .map((lane) => lane.heard_ms)
    .filter((each) => each !== null && each !== undefined);
  return heard.length ? Math.max(...heard) : moment.newest_ms;
}
