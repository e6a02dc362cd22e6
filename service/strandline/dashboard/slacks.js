// Two pictures without an axis of time: what every slack would give, and how long the open runs are. Draws only.

import { age, brief, oneUnit, share } from "./format.js";
import { logarithmic, powerTicks, secondTicks } from "./scales.js";
import { crisp, line, palette } from "./surface.js";

const SHARE_LEAST = 1e-5;

/** The row of the slack nearest to a number of seconds: [slack_s, late_share, hold_mean_s]; null without rows. */
export function rowNear(rows, slack_s) {
  let best = null;
  for (const row of rows ?? []) {
    if (best === null || distance(row[0], slack_s) < distance(best[0], slack_s)) best = row;
  }
  return best;
}

function distance(one, other) {
  return Math.abs(Math.log(Math.max(one, 1e-3)) - Math.log(Math.max(other, 1e-3)));
}

/** What another slack would change, in a sentence. */
export function slackSentence(rows, slack_s, other) {
  const now = rowNear(rows, slack_s);
  if (now === null || other === null) return "";
  const held = (row) => (row[2] === null || row[2] === undefined ? "" : `, held ${age(row[2])} on average`);
  if (now[0] === other[0]) return `With ${age(slack_s)}, as now: ${share(now[1])} late${held(now)}.`;
  const wish = `With ${age(other[0])} you would have ${share(other[1])} late${held(other)}`;
  return `${wish}; now ${age(slack_s)}: ${share(now[1])}${held(now)}.`;
}

/** The rows worth an axis: up to the first slack with which nothing is late, and well past the present one. */
function within(rows, slack_s) {
  const clear = rows.findIndex((row) => row[1] < SHARE_LEAST);
  const most_s = Math.max(clear < 0 ? Infinity : rows[clear][0] * 3, slack_s * 4);
  return rows.filter((row) => row[0] <= most_s);
}

/** The curve of every slack; returns its axis, so that a pointer can be answered. `chosen`: the row looked at. */
export function drawSlacks(surface, rows, look) {
  const em = surface.em,
    top = 12,
    bottom = top + 150,
    height = bottom + em * 3.2;
  const context = surface.begin(height);
  if (context === null) return null;
  const colour = palette(),
    left = gutter(surface, 0.9, powerTicks(SHARE_LEAST, 1).map(share)),
    right = surface.width - 14;
  const known = within(
    (rows ?? []).filter((row) => row[0] > 0 && row[1] !== null),
    look.slack_s,
  );
  if (known.length < 2) {
    context.fillStyle = colour.quiet;
    context.textAlign = "left";
    surface.font(1);
    context.fillText(look.past ? "Not kept of that time." : "Not enough events yet.", 0, 24);
    return null;
  }
  const least_s = known[0][0],
    most_s = known[known.length - 1][0];
  const x = logarithmic(least_s, most_s, left, right),
    y = logarithmic(SHARE_LEAST, 1, bottom, top);
  drawAxes(surface, context, { left, right, top, bottom, em }, x, y, [least_s, most_s], colour);
  if (look.target) {
    context.strokeStyle = colour.fine;
    context.lineWidth = 2;
    context.setLineDash([8, 4]);
    line(context, left, y(look.target), right, y(look.target));
    context.setLineDash([]);
  }
  context.strokeStyle = colour.late;
  context.lineWidth = 2.5;
  context.beginPath();
  known.forEach((row, index) =>
    index ? context.lineTo(x(row[0]), y(row[1])) : context.moveTo(x(row[0]), y(row[1])),
  );
  context.stroke();
  drawPresent(surface, context, known, rows, look, x, y, { left, right, top, bottom }, colour);
  return { x, rows: known };
}

/** Where a picture begins, right of its labels. */
function gutter(surface, size, labels) {
  surface.font(size);
  return Math.ceil(Math.max(28, ...labels.map((label) => surface.measure(label) + 9)));
}

function drawAxes(surface, context, box, x, y, [least_s, most_s], colour) {
  surface.font(0.9);
  context.lineWidth = 1;
  context.strokeStyle = colour.rule;
  context.fillStyle = colour.quiet;
  context.textAlign = "right";
  for (const tick of powerTicks(SHARE_LEAST, 1)) {
    line(context, box.left, crisp(y(tick)), box.right, crisp(y(tick)));
    context.fillText(share(tick), box.left - 7, y(tick));
  }
  context.textAlign = "center";
  let free = -Infinity;
  for (const tick of secondTicks(least_s, most_s)) {
    if (x(tick) < free) continue;
    const half = surface.measure(oneUnit(tick)) / 2;
    free = x(tick) + box.em * 3.6;
    line(context, crisp(x(tick)), box.top, crisp(x(tick)), box.bottom);
    const middle = Math.max(half, Math.min(surface.width - half - 1, x(tick)));
    context.fillText(oneUnit(tick), middle, box.bottom + box.em);
  }
  context.fillText("slack →", (box.left + box.right) / 2, box.bottom + box.em * 2.4);
}

function drawPresent(surface, context, known, rows, look, x, y, box, colour) {
  const now = rowNear(rows, look.slack_s), // a slack of 0 has a row, but no place on a logarithmic axis: at its edge
    at = Math.max(box.left, Math.min(box.right, x(Math.max(look.slack_s, known[0][0]))));
  context.strokeStyle = colour.hold;
  context.lineWidth = 2;
  line(context, at, box.top, at, box.bottom);
  context.fillStyle = colour.hold;
  context.beginPath();
  context.arc(at, y(Math.max(SHARE_LEAST, now[1] ?? 0)), 5, 0, 2 * Math.PI);
  context.fill();
  surface.font(0.95, 600);
  const words = `now ${age(look.slack_s)}`,
    right = at + 8 + surface.measure(words) < box.right;
  context.textAlign = right ? "left" : "right";
  context.fillText(words, right ? at + 7 : at - 7, box.top + 8);
  if (!look.chosen || look.chosen[0] === now[0]) return;
  context.strokeStyle = colour.ink;
  context.lineWidth = 1.5;
  context.beginPath();
  context.arc(x(look.chosen[0]), y(look.chosen[1]), 6, 0, 2 * Math.PI);
  context.stroke();
}

/** The longest open runs as bars, on a logarithmic axis of their events. */
export function drawRuns(surface, lengths, past) {
  const em = surface.em,
    row = Math.round(em * 1.25),
    height = Math.max(1, lengths.length) * row + 6;
  const context = surface.begin(height);
  if (context === null) return;
  const colour = palette(),
    most = Math.max(10, ...lengths),
    left = gutter(surface, 0.95, lengths.map(brief));
  const x = logarithmic(0.8, most, left, surface.width - 10);
  surface.font(0.95);
  context.textAlign = "right";
  if (!lengths.length) {
    context.textAlign = "left";
    context.fillStyle = colour.quiet;
    context.fillText(past ? "Their lengths are not kept of that time." : "No run is open.", 0, row / 2 + 3);
  }
  lengths.forEach((events, index) => {
    const y = index * row + row / 2 + 3;
    context.fillStyle = colour.ink;
    context.fillText(brief(events), left - 8, y);
    context.fillStyle = colour.strand;
    context.fillRect(left, y - row * 0.28, Math.max(2, x(events) - left), row * 0.56);
  });
}
