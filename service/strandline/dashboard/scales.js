// Scales from values to pixels and the ticks on them. Pure: no DOM, no clock. Times in ms since 1970 UTC.

const MINUTE_S = 60,
  HOUR_S = 3600,
  DAY_S = 86400;
const TIME_STEPS_S = [
  0.1,
  0.2,
  0.5,
  1,
  2,
  5,
  10,
  15,
  30,
  MINUTE_S,
  2 * MINUTE_S,
  5 * MINUTE_S,
  10 * MINUTE_S,
  15 * MINUTE_S,
  30 * MINUTE_S,
  HOUR_S,
  2 * HOUR_S,
  3 * HOUR_S,
  6 * HOUR_S,
  12 * HOUR_S,
  DAY_S,
  7 * DAY_S,
];
const DURATION_STEPS_S = [...TIME_STEPS_S.filter((step) => step >= 1), 2 * DAY_S, 14 * DAY_S, 30 * DAY_S, 100 * DAY_S]
  .sort((one, other) => one - other);
/** The windows that a person can choose, in seconds. */
export const WINDOWS_S = [15, 30, 60, 120, 300, 900, 3600, 6 * 3600, DAY_S];

/** A linear scale: value -> pixel. `invert` gives the value at a pixel. */
export function linear(from, to, low, high) {
  const factor = (high - low) / (to - from || 1);
  const scale = (value) => low + (value - from) * factor;
  scale.invert = (pixel) => from + (pixel - low) / (factor || 1);
  return scale;
}

/** A logarithmic scale; values below `from` (0 too) stand at `from`. */
export function logarithmic(from, to, low, high) {
  const base = Math.log(from),
    factor = (high - low) / (Math.log(to) - base || 1);
  const scale = (value) => low + (Math.log(Math.max(value, from)) - base) * factor;
  scale.invert = (pixel) => Math.exp(base + (pixel - low) / (factor || 1));
  return scale;
}

/** Ticks of a stretch of time, at most so many: { step_s, at: [ms] }, on whole steps of the zone's clock. */
export function timeTicks(from_ms, to_ms, at_most, offset_ms = 0) {
  const span_s = (to_ms - from_ms) / 1000;
  const step_s = TIME_STEPS_S.find((step) => span_s / step <= at_most) ?? TIME_STEPS_S[TIME_STEPS_S.length - 1];
  const step_ms = step_s * 1000,
    at = [];
  for (let tick = Math.ceil((from_ms + offset_ms) / step_ms) * step_ms; tick <= to_ms + offset_ms; tick += step_ms) {
    at.push(tick - offset_ms);
  }
  return { step_s, at };
}

/**
 * Ticks of an axis of durations from 0 up to a number of seconds, at most `at_most` steps; the last one is at or above
 * it. Steps that people count in: below a second and above 100 days 1, 2, 5 of a power of ten.
 */
export function durationTicks(to_s, at_most) {
  const raw_s = Math.max(to_s, 1e-6) / at_most;
  const decimal = raw_s < 1 || raw_s > 100 * DAY_S,
    step_s = decimal ? decimalStep(raw_s) : DURATION_STEPS_S.find((step) => step >= raw_s);
  const ticks = [];
  for (let index = 0; index <= Math.ceil(to_s / step_s - 1e-9); index += 1) ticks.push(index * step_s);
  return ticks.length > 1 ? ticks : [0, step_s];
}

function decimalStep(raw_s) {
  const unit = raw_s < 1 ? 1 : DAY_S,
    power = 10 ** Math.floor(Math.log10(raw_s / unit) + 1e-9);
  return unit * power * [1, 2, 5, 10].find((each) => each * power >= (raw_s / unit) * (1 - 1e-9));
}

/** Seconds at which a logarithmic axis of time is labelled. */
export function secondTicks(from, to) {
  const all = [0.001, 0.01, 0.1, 1, 10, 60, 600, 3600, 36000, DAY_S, 10 * DAY_S, 100 * DAY_S];
  return all.filter((tick) => tick >= from && tick <= to);
}

/** Powers of ten within a stretch, ends included. */
export function powerTicks(from, to) {
  const ticks = [];
  for (let power = Math.ceil(Math.log10(from) - 1e-9); power <= Math.log10(to) + 1e-9; power += 1)
    ticks.push(10 ** power);
  return ticks;
}

/** The window that shows an output so far behind with room to see it move; keeps `before_s` while that will do. */
export function fittingWindow(behind_s, before_s = null) {
  const wanted = Math.max(30, behind_s * 1.5);
  if (before_s !== null && wanted <= before_s && wanted > before_s * 0.3) return before_s;
  return WINDOWS_S.find((each) => each >= wanted) ?? WINDOWS_S[WINDOWS_S.length - 1];
}

/** The last index whose value is at or below `value` in an ascending array; -1 if none is. */
export function lastAtOrBelow(values, value) {
  let low = 0,
    high = values.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (values[middle] <= value) low = middle + 1;
    else high = middle;
  }
  return low - 1;
}
