// The picture of the lanes: one lane per source on one axis of event time that ends now, and the watermark through all.
// Left of the line lies what is released. The line is pegged at the lane that holds it. Draws only; decides nothing.

import { age, counted, isolated, near, shown, timeOfDay } from "./format.js";
import { glyph, lateMark, lozenge, ROLES } from "./glyphs.js";
import { linear, timeTicks } from "./scales.js";
import { isCurrent, laneOf } from "./reading.js";
import { crisp, hatch, line, palette } from "./surface.js";

const THREADS = 4; // runs side by side in a lane; more of them share
const HEAD = 46,
  FOOT = 10,
  NARROW = 620;

/** Where everything stands for a width: gutters, heights and the axis of time. */
export function layout(width, lanes, from_ms, to_ms, em) {
  const narrow = width < NARROW;
  const left = narrow ? 8 : Math.min(190, Math.round(width * 0.19)),
    right = narrow ? 14 : Math.min(250, Math.round(width * 0.25));
  const lane = Math.round(narrow ? em * 3.2 : em * 2.1);
  const x = linear(from_ms, to_ms, left, width - right);
  return {
    narrow,
    left,
    right,
    lane,
    width,
    plot: width - right,
    x,
    from_ms,
    to_ms,
    top: (index) => HEAD + index * lane,
    middle: (index) => HEAD + (index + (narrow ? 0.68 : 0.5)) * lane,
    height: HEAD + Math.max(1, lanes) * lane + FOOT,
  };
}

/** The lane under a point of the picture; -1 where there is none. */
export function laneAt(place, lanes, y) {
  const index = Math.floor((y - HEAD) / place.lane);
  return index >= 0 && index < lanes ? index : -1;
}

/** Draw a moment; the layout that was used, or null where nothing can be seen. `look`: window, zone, selected. */
export function drawLanes(surface, moment, look) {
  const lanes = moment.lanes,
    to_ms = moment.now_ms,
    from_ms = to_ms - look.window_s * 1000;
  const place = layout(surface.width, lanes.length, from_ms, to_ms, surface.em);
  const context = surface.begin(place.height);
  if (context === null) return null;
  const colour = palette();
  drawHolderBand(context, place, moment, colour);
  drawGround(context, place, moment, colour);
  drawTimes(surface, context, place, moment, look, colour);
  drawLanesGround(context, place, moment, look, colour);
  context.save(); // one clip for all lanes: nothing of them may reach into the gutters
  context.beginPath();
  context.rect(place.left - 6, 0, place.plot - place.left + 12, place.height);
  context.clip();
  lanes.forEach((lane, index) => drawWithin(context, place, moment, lane, place.middle(index), colour));
  context.restore();
  for (let index = 0; index < lanes.length; index += 1) {
    drawName(surface, context, place, lanes[index], place.top(index), colour);
    drawWords(surface, context, place, moment, lanes[index], place.top(index), look.zone, colour);
  }
  drawWatermark(surface, context, place, moment, look, colour);
  return place;
}

/** What is released, tinted up to the watermark. */
function drawGround(context, place, moment, colour) {
  if (moment.watermark_ms === null) return;
  const edge = Math.max(place.left, Math.min(place.plot, place.x(moment.watermark_ms)));
  context.fillStyle = colour.released;
  context.fillRect(place.left, HEAD - 6, edge - place.left, place.height - HEAD + 6 - FOOT + 4);
}

function drawTimes(surface, context, place, moment, { zone, past }, colour) {
  const pole = moment.watermark_ms === null ? -Infinity : place.x(moment.watermark_ms);
  const offset_ms = zone === "local" ? -new Date(place.to_ms).getTimezoneOffset() * 60000 : 0;
  surface.font(0.9);
  const ticks = timeTicks(
    place.from_ms,
    place.to_ms,
    Math.max(2, (place.plot - place.left) / (surface.em * 7)),
    offset_ms,
  );
  context.textAlign = "center";
  for (const tick of ticks.at) {
    const x = place.x(tick);
    context.strokeStyle = colour.rule;
    context.lineWidth = 1;
    line(context, crisp(x), HEAD - 8, crisp(x), place.height - FOOT);
    if (x < place.left + 26 || x > place.plot - surface.em * 3.6) continue;
    const words = timeOfDay(tick, zone, ticks.step_s);
    if (Math.abs(x - pole) < surface.measure(words) / 2 + 4) continue;
    context.fillStyle = colour.quiet;
    context.fillText(words, x, HEAD - 16);
  }
  drawNow(surface, context, place, pole, past, colour);
  context.strokeStyle = colour.quiet;
  line(context, crisp(place.plot), HEAD - 8, crisp(place.plot), place.height - FOOT);
}

/** The word at the end of the axis; beside it where the watermark stands so near that its pole would cross the word. */
function drawNow(surface, context, place, pole, past, colour) {
  const word = past ? "then" : "now";
  surface.font(0.9, 600);
  const crossed = pole > place.plot - surface.measure(word) - 5;
  context.fillStyle = colour.ink;
  context.textAlign = crossed ? "left" : "right";
  if (!crossed || !place.narrow) context.fillText(word, crossed ? place.plot + 5 : place.plot, HEAD - 16);
}

/** A band behind the lane that holds the output. */
function drawHolderBand(context, place, moment, colour) {
  const holder = pressing(moment) ? moment.lanes.findIndex((lane) => lane.role === "holding") : -1;
  if (holder < 0) return;
  context.fillStyle = colour.panel;
  context.fillRect(0, place.top(holder) + 1, place.width, place.lane - 2);
}

/** What lies below the events: the chosen lane's frame, and a line for each lane. */
function drawLanesGround(context, place, moment, look, colour) {
  const chosen = moment.lanes.findIndex((lane) => lane.source === look.selected);
  if (chosen >= 0) {
    context.strokeStyle = colour.strand;
    context.lineWidth = 2;
    context.strokeRect(1, place.top(chosen) + 1.5, place.width - 2, place.lane - 3);
  }
  context.strokeStyle = colour.rule;
  context.lineWidth = 1;
  context.beginPath();
  for (let index = 0; index < moment.lanes.length; index += 1) {
    context.moveTo(place.left, crisp(place.middle(index)));
    context.lineTo(place.plot, crisp(place.middle(index)));
  }
  context.stroke();
}

function drawWithin(context, place, moment, lane, middle, colour) {
  drawWaiting(context, place, moment, lane, middle, colour);
  drawStrands(context, place, lane, middle, colour);
  drawLate(context, place, lane, middle, colour);
  drawOwnWatermark(context, place, lane, middle, colour);
  drawNewest(context, place, moment, lane, middle, colour);
}

/** The slack behind the newest event: hatched, because what lies in it may still be overtaken. */
function drawWaiting(context, place, moment, lane, middle, colour) {
  if (lane.newest_ms === null || lane.newest_ms === undefined) return;
  const x0 = Math.max(place.left, place.x(lane.newest_ms - moment.slack_s * 1000));
  const x1 = Math.min(place.plot, place.x(lane.newest_ms));
  if (x1 <= x0) return;
  hatch(context, x0, middle - 7, x1 - x0, 14, 6, colour.slack);
}

/** Held events: each run a strand from head to tail, thicker where it has more events. */
function drawStrands(context, place, lane, middle, colour) {
  context.strokeStyle = colour.strand;
  context.lineCap = "round";
  const count = lane.strands.length,
    threads = Math.min(count, THREADS),
    most = count > 1 ? 12 / threads - 0.5 : 7;
  for (let index = 0; index < count; index += 1) {
    const [head_ms, tail_ms, events] = lane.strands[index];
    const y = middle + ((index % threads) - (threads - 1) / 2) * (12 / threads);
    context.lineWidth = Math.min(most, 2.5 + Math.log10(Math.max(1, events)) * 1.5);
    const x0 = Math.max(place.left - 4, place.x(head_ms)),
      x1 = place.x(tail_ms);
    line(context, x0, y, Math.max(x1, x0 + 0.5), y);
  }
  context.lineCap = "butt";
}

/** Late arrivals, at their event time: crosses below the lane's line. */
function drawLate(context, place, lane, middle, colour) {
  if (!lane.late?.length) return;
  context.strokeStyle = colour.late;
  context.lineWidth = 1.75;
  for (const [, time_ms] of lane.late) {
    if (time_ms < place.from_ms) {
      context.globalAlpha = 0.6; // older than the window: kept at its edge, so that it is not missed
      lateMark(context, place.left + 2, middle + 5);
      context.globalAlpha = 1;
    } else lateMark(context, place.x(time_ms), middle + 5);
  }
}

/** Where order is kept within each source, each lane has a watermark of its own: a short pole. */
function drawOwnWatermark(context, place, lane, middle, colour) {
  if (lane.watermark_ms === null || lane.watermark_ms === undefined) return;
  const x = Math.max(place.left, Math.min(place.plot, place.x(lane.watermark_ms)));
  context.strokeStyle = colour.hold;
  context.lineWidth = 2.5;
  line(context, x, middle - 10, x, middle + 10);
}

function drawNewest(context, place, moment, lane, middle, colour) {
  if (lane.promised_ms !== null && lane.promised_ms !== undefined && lane.promised_ms > place.from_ms) {
    context.strokeStyle = colour.fine;
    context.lineWidth = 2;
    const x = Math.min(place.plot, place.x(lane.promised_ms));
    line(context, x, middle - 7, x, middle + 7);
  }
  if (lane.newest_ms === null || lane.newest_ms === undefined) return;
  const x = place.x(lane.newest_ms);
  if (x < place.left) {
    context.strokeStyle = colour.ink;
    context.lineWidth = 2;
    line(context, place.left + 6, middle - 4, place.left + 1, middle);
    line(context, place.left + 1, middle, place.left + 6, middle + 4);
    return;
  }
  lozenge(context, Math.min(x, place.plot + 1), middle, colour.ink, lane.active && !lane.excused);
}

function drawName(surface, context, place, lane, top, colour) {
  const y = place.narrow ? top + place.lane * 0.26 : top + place.lane / 2;
  glyph(context, lane.role, 8, y, colour);
  surface.font(1, lane.role === "holding" ? 700 : 400);
  context.textAlign = "left";
  context.direction = "ltr";
  context.fillStyle = lane.excused || !lane.active || lane.found === false ? colour.quiet : colour.ink;
  const room = place.narrow ? place.width * 0.5 : place.left - 28;
  const text = surface.fit(shown(lane.source), room);
  context.fillText(isolated(text), 20, y);
}

/** In a few words at the right: what this source does, and for how long. */
export function wordsOf(moment, lane, zone) {
  const heard_s =
    lane.heard_ms === null || lane.heard_ms === undefined ? null : (moment.now_ms - lane.heard_ms) / 1000;
  switch (lane.role) {
    case "holding":
      return holdingWords(moment, zone);
    case "silent":
      return `silent ${age(heard_s)}${lane.active ? "" : ", idle"}`;
    case "late":
      return `${counted(lane.late.length, "late event")}`;
    case "ahead":
      return `${age((lane.newest_ms - moment.now_ms) / 1000)} ahead`;
    case "expected":
      return "not heard yet";
    case "excused":
      return heard_s === null || lane.newest_ms === null ? "excused" : `excused, silent ${age(heard_s)}`;
    default:
      return lane.held_events ? `${counted(lane.held_events, "event")} held` : "";
  }
}

const PRESSING_NOT = { slack: "the slack only", slack_set: "the slack only", slow_source: "furthest behind" };

/** Does the holder matter, or is the output as current as the slack allows? */
function pressing(moment) {
  return !isCurrent(moment) && !["slack", "slack_set"].includes(moment.hold.why);
}

function holdingWords(moment, zone) {
  if (!pressing(moment)) return PRESSING_NOT[moment.hold.why] ?? "furthest behind";
  const why =
    {
      slow_source: "slowest",
      silent_source: "silent",
      expected_source: "expected",
      promised_source: "promised",
      hold_at_most: "held at most",
    }[moment.hold.why] ?? "holds";
  const heard_ms = laneOf(moment, moment.hold.source)?.heard_ms ?? null;
  const since_ms = moment.hold.why === "silent_source" && heard_ms !== null ? heard_ms : moment.hold.since_ms;
  return `${why} since ${near(since_ms, moment.now_ms, zone)} · ${age((moment.now_ms - since_ms) / 1000)}`;
}

function drawWords(surface, context, place, moment, lane, top, zone, colour) {
  const words = wordsOf(moment, lane, zone);
  if (!words) return;
  const y = place.narrow ? top + place.lane * 0.26 : top + place.lane / 2;
  const room = place.narrow ? place.width * 0.42 : place.right - 20;
  surface.font(0.95, lane.role === "holding" ? 600 : 400);
  const short = lane.role === "holding" && surface.measure(words) > room ? words.replace(/ since .* · /, " ") : words;
  const text = surface.fit(short, room);
  if (lane.role === "holding" && pressing(moment)) {
    const width = surface.measure(text) + 12,
      x = place.narrow ? place.width - width - 2 : place.plot + 12;
    context.fillStyle = colour.hold;
    context.fillRect(x, y - surface.em * 0.8, width, surface.em * 1.6);
    context.fillStyle = colour["hold-text"];
    context.textAlign = "left";
    context.fillText(text, x + 6, y);
    return;
  }
  if (place.narrow) {
    // the words stand on the picture there
    context.fillStyle = colour.paper;
    context.fillRect(
      place.plot - 8 - surface.measure(text),
      y - surface.em * 0.65,
      surface.measure(text) + 6,
      surface.em * 1.3,
    );
  }
  context.fillStyle = lane.role === "other" ? colour.quiet : colour.ink;
  context.textAlign = place.narrow ? "right" : "left";
  context.fillText(text, place.narrow ? place.plot - 5 : place.plot + 14, y);
}

/** The watermark: one line through all lanes, a flag with its time on top, a peg where it is held. */
function drawWatermark(surface, context, place, moment, look, colour) {
  if (moment.watermark_ms === null) return;
  const raw = place.x(moment.watermark_ms),
    outside = raw < place.left;
  const x = Math.max(place.left, Math.min(place.plot, raw));
  context.strokeStyle = colour.hold;
  context.lineWidth = 2.5;
  context.setLineDash(outside ? [5, 4] : []);
  line(context, x, HEAD - 26, x, place.height - FOOT + 4);
  context.setLineDash([]);
  drawFlag(surface, context, place, moment, look, x, outside, colour);
  const index = moment.lanes.findIndex((lane) => lane.role === "holding");
  if (index < 0 || outside) return;
  const y = place.middle(index);
  context.fillStyle = colour.hold;
  context.beginPath();
  context.arc(x, y, 6.5, 0, 2 * Math.PI);
  context.fill();
  context.fillStyle = colour.paper;
  context.beginPath();
  context.arc(x, y, 2.5, 0, 2 * Math.PI);
  context.fill();
}

function drawFlag(surface, context, place, moment, look, x, outside, colour) {
  surface.font(0.95, 600);
  const text = `${outside ? "◂ " : ""}watermark ${near(moment.watermark_ms, moment.now_ms, look.zone)}`;
  const width = surface.measure(text) + 14,
    height = surface.em * 1.5;
  const at = Math.max(0, Math.min(place.width - width, x - width + 1.25 < place.left ? x - 1.25 : x - width + 1.25));
  context.fillStyle = colour.hold;
  context.fillRect(at, 0, width, height);
  context.fillStyle = colour["hold-text"];
  context.textAlign = "left";
  context.fillText(text, at + 7, height / 2 + 0.5);
  context.strokeStyle = colour.hold;
  context.lineWidth = 2.5;
  line(context, x, height - 1, x, HEAD - 24);
}

/** One lane in words, for the strip below the picture. */
export function laneSentence(moment, lane, zone) {
  const heard =
    lane.heard_ms === null || lane.heard_ms === undefined
      ? "not heard yet"
      : `last heard ${near(lane.heard_ms, moment.now_ms, zone)} (${age((moment.now_ms - lane.heard_ms) / 1000)} ago)`;
  const newest =
    lane.newest_ms === null || lane.newest_ms === undefined
      ? "no event yet"
      : `newest event ${near(lane.newest_ms, moment.now_ms, zone)}`;
  const role = ROLES[lane.role] ? `${ROLES[lane.role]}; ` : "";
  const held = counted(lane.held_events ?? 0, "event"),
    late = counted(lane.late.length, "late event");
  return `: ${role}${newest}, ${heard}; ${held} held, ${late} shown.`;
}
