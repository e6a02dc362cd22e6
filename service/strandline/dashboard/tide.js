// The pictures on the arrival clock, one below the other on one axis: how far behind the output is and who held it, the
// lateness of what came, and the share that came late. Draws only; what is drawn comes from a record's columns.

import { isolated, oneUnit, share, shown, timeOfDay } from "./format.js";
import { flag } from "./glyphs.js";
import { durationTicks, lastAtOrBelow, linear, logarithmic, powerTicks, secondTicks, timeTicks } from "./scales.js";
import { crisp, hatch, line, palette } from "./surface.js";

const LEFT_AT_LEAST = 40,
  LABEL_GAP = 7,
  RIGHT = 12,
  LABEL_SIZE = 0.9, // of the page's small text
  SHARE_LEAST = 1e-5, // the foot of the axis of the late share
  STRIP = 22,
  ON_TIME = 9,
  BRIEF_PX = 8,
  CELL_AT_LEAST = 4;

/** What holds a feed, in a word, with the pattern that stands for it in the strip. */
export const HOLDS = {
  nothing_held: ["nothing held", "none"],
  slack: ["slack", "light"],
  slack_set: ["slack set by hand", "light"],
  slow_source: ["slow source", "hatch"],
  promised_source: ["promised no further", "hatch"],
  expected_source: ["expected source", "hatch"],
  silent_source: ["silent source", "solid"],
  all_silent: ["all silent", "solid"],
  hold_at_most: ["held at most", "solid"],
  sink_full: ["sink full", "alarm"],
  sink_paused: ["sink paused", "alarm"],
  stopped: ["stopped", "gap"],
};

/** The labels of the levels: of how far behind, of the lateness, of the share; in the order of the pictures. */
function levelsOf(record, look) {
  const [first, last] = span(record, look),
    target = look.steering?.late_share_target ?? null;
  let behind_s = 1,
    late = Math.max(target ? target * 4 : 0, 0.001);
  for (let index = first; index <= last; index += 1) {
    behind_s = Math.max(behind_s, record.behind_s[index] ?? 0);
    late = Math.max(late, record.late_share[index] ?? 0);
  }
  const edges = record.edges_s,
    least_s = edges.length < 2 ? null : edges.find((edge) => edge > 0) / 2,
    most_s = least_s === null ? null : greatestLateness(record, look) * 2,
    share_most = Math.min(1, late * 1.5);
  return {
    behind: { ticks: durationTicks(behind_s, 4), words: oneUnit },
    lateness: { least_s, most_s, ticks: least_s === null ? [] : secondTicks(least_s, most_s), words: oneUnit },
    share: { most: share_most, ticks: powerTicks(SHARE_LEAST, share_most), words: share },
  };
}

/** The frame that all three share: the axis of the arrival clock, right of the widest label of any of them. */
function frame(surface, record, look) {
  const levels = levelsOf(record, look),
    width = surface.width;
  surface.font(LABEL_SIZE);
  const labels = Object.values(levels).flatMap(({ ticks, words }) => ticks.map((tick) => surface.measure(words(tick))));
  const left = Math.ceil(Math.max(LEFT_AT_LEAST, ...labels.map((label) => label + LABEL_GAP + 2)));
  return {
    left,
    right: width - RIGHT,
    width,
    x: linear(look.from_ms, look.to_ms, left, width - RIGHT),
    from_ms: look.from_ms,
    to_ms: look.to_ms,
    levels,
  };
}

function drawClock(surface, context, place, y, zone, colour, top) {
  const offset_ms = zone === "local" ? -new Date(place.to_ms).getTimezoneOffset() * 60000 : 0;
  const ticks = timeTicks(
    place.from_ms,
    place.to_ms,
    Math.max(2, (place.right - place.left) / (surface.em * 7)),
    offset_ms,
  );
  surface.font(0.9);
  context.textAlign = "center";
  context.lineWidth = 1;
  for (const tick of ticks.at) {
    const x = place.x(tick);
    context.strokeStyle = colour.rule;
    line(context, crisp(x), top, crisp(x), y - 9);
    if (x < place.left + 20 || x > place.right - 26) continue;
    context.fillStyle = colour.quiet;
    context.fillText(timeOfDay(tick, zone, ticks.step_s), x, y);
  }
}

function drawLevels(surface, context, place, y, { ticks, words }, colour) {
  surface.font(LABEL_SIZE);
  context.textAlign = "right";
  context.lineWidth = 1;
  let free = Infinity; // labels go up the axis; one that would touch the last is left out
  for (const tick of ticks) {
    context.strokeStyle = colour.rule;
    if (y(tick) > free) continue;
    free = y(tick) - surface.em * 1.15;
    line(context, place.left, crisp(y(tick)), place.right, crisp(y(tick)));
    context.fillStyle = colour.quiet;
    context.fillText(words(tick), place.left - LABEL_GAP, y(tick));
  }
}

/** The span of a record's columns within the frame, one beyond each end so that lines reach the edges. */
function span(record, place) {
  return [
    Math.max(0, lastAtOrBelow(record.t_ms, place.from_ms)),
    Math.min(record.t_ms.length - 1, lastAtOrBelow(record.t_ms, place.to_ms) + 1),
  ];
}

/** A path through (time, value); a gap in time or a value that is missing breaks it. */
function trace(context, record, place, first, last, y, value) {
  const gap_ms = Math.max(5000, ((place.to_ms - place.from_ms) / 600) * 8);
  let before_ms = null;
  context.beginPath();
  for (let index = first; index <= last; index += 1) {
    const what = value(index);
    if (what === null || what === undefined || Number.isNaN(what)) {
      before_ms = null;
      continue;
    }
    const t_ms = record.t_ms[index],
      x = place.x(t_ms);
    if (before_ms === null || t_ms - before_ms > gap_ms) context.moveTo(x, y(what));
    else context.lineTo(x, y(what));
    before_ms = t_ms;
  }
}

/** The pointer's instant, on all three pictures at once. */
function drawCursor(context, place, look, top, bottom, colour) {
  if (look.cursor_ms === null || look.cursor_ms < place.from_ms || look.cursor_ms > place.to_ms) return;
  context.strokeStyle = colour.quiet;
  context.lineWidth = 1;
  line(context, crisp(place.x(look.cursor_ms)), top, crisp(place.x(look.cursor_ms)), bottom);
}

/** Time before the first thing that is known: tinted, so that nobody takes it for a time without trouble. */
function drawUnknown(surface, context, place, record, top, bottom, colour) {
  const x = record.t_ms.length ? Math.min(place.right, place.x(record.t_ms[0])) : place.right;
  if (x - place.left < 2) return;
  context.fillStyle = colour.panel;
  context.fillRect(place.left, top, x - place.left, bottom - top);
  surface.font(0.9);
  context.textAlign = "center";
  context.fillStyle = colour.quiet;
  if (x - place.left > surface.measure("not known") + 12)
    context.fillText("not known", (place.left + x) / 2, (top + bottom) / 2);
}

function inside(context, place, top, bottom, draw) {
  context.save();
  context.beginPath();
  context.rect(place.left, top, place.right - place.left, bottom - top);
  context.clip();
  draw();
  context.restore();
}

/** How far the output was behind, what of it was the age of the newest event, who held it, and what people did. */
export function drawBehind(surface, record, look) {
  const em = surface.em,
    top = 30,
    bottom = top + 120,
    height = bottom + 8 + STRIP + em * 2;
  const context = surface.begin(height);
  if (context === null) return null;
  const colour = palette(),
    place = frame(surface, record, look),
    [first, last] = span(record, place),
    levels = place.levels.behind,
    y = linear(0, levels.ticks[levels.ticks.length - 1], bottom, top);
  drawLevels(surface, context, place, y, levels, colour);
  drawClock(surface, context, place, height - em, look.zone, colour, top);
  drawUnknown(surface, context, place, record, top, bottom, colour);
  inside(context, place, top - 4, bottom + 1, () => {
    trace(context, record, place, first, last, y, (index) => record.behind_s[index]);
    context.strokeStyle = colour.hold;
    context.lineWidth = 2.25;
    context.stroke();
    trace(context, record, place, first, last, y, (index) => record.newest_age_s[index]);
    context.strokeStyle = colour.strand;
    context.lineWidth = 1.75;
    context.stroke();
    trace(context, record, place, first, last, y, (index) => record.slack_s[index]);
    context.strokeStyle = colour.warn;
    context.setLineDash([6, 4]);
    context.stroke();
    context.setLineDash([]);
  });
  drawHolds(surface, context, place, record, bottom + 8, colour);
  drawActs(context, place, look.acts, top - 2, bottom, colour);
  drawCursor(context, place, look, top, bottom + 8 + STRIP, colour);
  return place;
}

/** Holds as they can be seen: neighbours too short for that are one, of the reason that most of it had. */
function joinedHolds(holds, place) {
  const least_ms = ((place.to_ms - place.from_ms) / (place.right - place.left)) * BRIEF_PX,
    found = [];
  for (const hold of holds) {
    if (hold.to_ms < place.from_ms || hold.from_ms > place.to_ms) continue;
    const last = found[found.length - 1],
      brief = hold.to_ms - hold.from_ms < least_ms;
    if (brief && last?.brief && hold.from_ms - last.to_ms < least_ms) {
      if (hold.source !== last.source) last.source = null;
      last.shares.set(hold.why, (last.shares.get(hold.why) ?? 0) + hold.to_ms - hold.from_ms);
      last.to_ms = hold.to_ms;
    } else found.push({ ...hold, brief, shares: new Map([[hold.why, hold.to_ms - hold.from_ms]]) });
  }
  for (const hold of found) hold.why = [...hold.shares].reduce((most, each) => (each[1] > most[1] ? each : most))[0];
  return found;
}

function patternOf(hold) {
  return HOLDS[hold.why]?.[1] ?? "light";
}

function drawHolds(surface, context, place, record, top, colour) {
  surface.font(0.85, 600);
  for (const hold of joinedHolds(record.holds, place)) {
    const x0 = Math.max(place.left, place.x(hold.from_ms)),
      x1 = Math.min(place.right, place.x(hold.to_ms));
    if (x1 <= x0) continue;
    drawHold(context, patternOf(hold), x0, top, Math.max(1, x1 - x0), colour);
    const words = hold.source
      ? isolated(surface.fit(shown(hold.source), x1 - x0 - 10))
      : `${HOLDS[hold.why]?.[0] ?? hold.why}${hold.brief && patternOf(hold) === "hatch" ? "s in turn" : ""}`;
    if (x1 - x0 < surface.em * 3 || surface.measure(words) > x1 - x0 - 6) continue;
    context.textAlign = "left";
    context.direction = "ltr";
    const width = surface.measure(words);
    if (patternOf(hold) === "hatch") {
      context.fillStyle = colour.paper;
      context.fillRect(x0 + 3, top + 3, width + 5, STRIP - 6);
    }
    context.fillStyle = { solid: colour["hold-text"], alarm: colour["late-text"] }[patternOf(hold)] ?? colour.ink;
    context.fillText(words, x0 + 5, top + STRIP / 2 + 0.5);
  }
}

function drawHold(context, pattern, x, y, width, colour) {
  if (pattern === "none") {
    context.strokeStyle = colour.rule;
    line(context, x, crisp(y + STRIP / 2), x + width, crisp(y + STRIP / 2));
  } else if (pattern === "gap") {
    context.strokeStyle = colour.ink;
    context.lineWidth = 1;
    context.setLineDash([2, 2]);
    context.strokeRect(x + 0.5, y + 0.5, width - 1, STRIP - 1);
    context.setLineDash([]);
  } else if (pattern === "hatch") {
    hatch(context, x, y, width, STRIP, 5, colour.hold);
    context.strokeStyle = colour.hold;
    context.lineWidth = 1;
    context.strokeRect(x + 0.5, y + 0.5, width - 1, STRIP - 1);
  } else {
    context.fillStyle = { light: colour.released, solid: colour.hold, alarm: colour.late }[pattern];
    context.fillRect(x, y, width, STRIP);
  }
}

function drawActs(context, place, acts, top, bottom, colour) {
  for (const act of acts) {
    if (act.at_ms < place.from_ms || act.at_ms > place.to_ms) continue;
    const x = place.x(act.at_ms);
    context.setLineDash([2, 3]);
    context.strokeStyle = colour.fine;
    context.lineWidth = 1.25;
    line(context, crisp(x), top, crisp(x), bottom);
    context.setLineDash([]);
    flag(context, x, top + 2, 18, colour.fine);
  }
}

/** How late events came, over time: darker where more came; what lies above the slack came too late. */
export function drawLateness(surface, record, look) {
  const em = surface.em,
    top = 10,
    bottom = top + 130,
    height = bottom + em * 2;
  const context = surface.begin(height);
  if (context === null) return null;
  const colour = palette(),
    place = frame(surface, record, look),
    levels = place.levels.lateness;
  drawClock(surface, context, place, height - em, look.zone, colour, top);
  if (levels.least_s === null) return place;
  const y = logarithmic(levels.least_s, levels.most_s, bottom - ON_TIME, top);
  inside(context, place, top, bottom, () => drawCells(context, place, record, y, bottom, top, colour));
  drawLevels(surface, context, place, y, levels, colour);
  drawUnknown(surface, context, place, record, top, bottom, colour);
  const [first, last] = span(record, place);
  inside(context, place, top, bottom, () => {
    trace(context, record, place, first, last, y, (index) => record.slack_s[index]);
    context.strokeStyle = colour.hold;
    context.lineWidth = 2;
    context.stroke();
  });
  drawCursor(context, place, look, top, bottom, colour);
  return place;
}

/** The upper edge of the latest cell that is shown, in seconds; at least a second, and at least the slack. */
function greatestLateness(record, place) {
  const [first, last] = span(record, place),
    edges = record.edges_s;
  let most_s = 1,
    row = 0;
  for (let index = first; index <= last; index += 1) {
    most_s = Math.max(most_s, record.slack_s[index] ?? 0);
    const counts = record.rows[index];
    for (let at = counts.length - 1; at > row; at -= 1) if (counts[at]) row = at;
  }
  return Math.max(most_s, edges[Math.min(row, edges.length - 1)]);
}

/** Cells of the map, several moments to a cell where there is no room for each. */
function drawCells(context, place, record, y, bottom, top, colour) {
  const cell_ms = ((place.to_ms - place.from_ms) / (place.right - place.left)) * CELL_AT_LEAST;
  const step_ms = Math.max(cell_ms, record.step_ms);
  for (const column of record.latenessColumns(place.from_ms, place.to_ms, step_ms)) {
    const x0 = Math.max(place.left, place.x(column.from_ms)),
      x1 = Math.min(place.right, place.x(column.to_ms));
    if (x1 <= x0) continue;
    for (let row = 0; row < column.counts.length; row += 1) {
      const many = column.counts[row];
      if (!many) continue;
      const low = row === 0 ? bottom : row === 1 ? bottom - ON_TIME : y(record.edges_s[row - 1]);
      const high = row === 0 ? bottom - ON_TIME : row < record.edges_s.length ? y(record.edges_s[row]) : top;
      const late = row > 0 && record.edges_s[row - 1] >= column.slack_s;
      context.globalAlpha = Math.min(1, (late ? 0.5 : 0.25) + 0.2 * Math.log10(many));
      context.fillStyle = late ? colour.late : colour.strand;
      context.fillRect(x0, high, x1 - x0 + 0.3, Math.max(1, low - high - 0.5));
    }
  }
  context.globalAlpha = 1;
}

/** The share that came late, against the target and the bound that holds whatever comes. */
export function drawShare(surface, record, look) {
  const em = surface.em,
    top = 10,
    bottom = top + 90,
    height = bottom + em * 2;
  const context = surface.begin(height);
  if (context === null) return null;
  const colour = palette(),
    place = frame(surface, record, look),
    [first, last] = span(record, place),
    levels = place.levels.share;
  const target = look.steering?.late_share_target ?? null,
    bound = look.steering?.bound_this_stretch ?? null;
  const y = logarithmic(SHARE_LEAST, levels.most, bottom, top);
  drawClock(surface, context, place, height - em, look.zone, colour, top);
  drawLevels(surface, context, place, y, levels, colour);
  drawUnknown(surface, context, place, record, top, bottom, colour);
  inside(context, place, top, bottom + 1, () => {
    if (target !== null && bound !== null) {
      context.fillStyle = colour.released;
      context.fillRect(
        place.left,
        y(target + bound),
        place.right - place.left,
        y(Math.max(SHARE_LEAST, target - bound)) - y(target + bound),
      );
    }
    if (target !== null) {
      context.strokeStyle = colour.fine;
      context.lineWidth = 2;
      context.setLineDash([8, 4]);
      line(context, place.left, y(target), place.right, y(target));
      context.setLineDash([]);
    }
    trace(context, record, place, first, last, y, (index) => record.late_share[index]);
    context.strokeStyle = colour.late;
    context.lineWidth = 2;
    context.stroke();
  });
  drawCursor(context, place, look, top, bottom, colour);
  return place;
}
