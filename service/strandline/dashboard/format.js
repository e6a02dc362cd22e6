// Values as text for people: times, ages, counts, shares, and names that are safe to show. Pure: no DOM, no clock.

const SECOND = 1,
  MINUTE = 60,
  HOUR = 3600,
  DAY = 86400;
const CONTROLS = /[\u0000-\u001f\u007f-\u009f\u200b\u200e\u200f\u2028-\u202e\u2060-\u2069\ufeff\ufff9-\ufffb]/g;
const GRAPHEMES_AT_MOST = 64; // a longer name is cut where it is shown; the whole of it stands in the table's title
const KEPT = "\u00a0"; // between a number and its unit, so that no line breaks there
const FSI = "\u2068",
  PDI = "\u2069";
const segmenter = new Intl.Segmenter("en", { granularity: "grapheme" });

/** Two digits. */
function two(number) {
  return String(number).padStart(2, "0");
}

/** Seconds as an age: "0.4 s", "12 s", "1 min 40 s", "2 h 5 min", "3 d 4 h". A dash for none. */
export function age(seconds) {
  if (seconds === null || seconds === undefined || !Number.isFinite(seconds)) return "–";
  const sign = seconds < 0 ? "−" : "";
  const size = Math.abs(seconds);
  if (size < 0.0005) return `0${KEPT}s`;
  if (size < 0.0995) return `${sign}${Math.round(size * 1000)}${KEPT}ms`;
  if (size < 0.95) return `${sign}${size.toFixed(1)}${KEPT}s`;
  if (size < 9.95) return `${sign}${size.toFixed(1).replace(/\.0$/, "")}${KEPT}s`;
  const whole = Math.round(size);
  for (const [unit, name, below, part] of [
    [DAY, "d", HOUR, "h"],
    [HOUR, "h", MINUTE, "min"],
    [MINUTE, "min", SECOND, "s"],
  ]) {
    if (whole < unit) continue;
    const rest = Math.floor((whole % unit) / below);
    return `${sign}${Math.floor(whole / unit)}${KEPT}${name}${rest ? ` ${rest}${KEPT}${part}` : ""}`;
  }
  return `${sign}${whole}${KEPT}s`;
}

/** Seconds on a round step of an axis, in one unit: the greatest that gives a whole number: "90 s", "36 h". */
export function oneUnit(seconds) {
  if (seconds === 0) return `0${KEPT}s`;
  const fits = ([unit]) => Math.abs(seconds / unit - Math.round(seconds / unit)) < 1e-9;
  const [unit, name] = [
    [DAY, "d"],
    [HOUR, "h"],
    [MINUTE, "min"],
    [SECOND, "s"],
  ].find(fits) ?? [seconds < 0.1 ? 0.001 : SECOND, seconds < 0.1 ? "ms" : "s"];
  return `${undusted(seconds / unit)}${KEPT}${name}`;
}

/** A number without the dust of binary fractions, thousands set apart. */
function undusted(number) {
  return Number(number.toPrecision(12)).toLocaleString("en-GB");
}

/** The parts of an instant in UTC or in the browser's own zone. */
function parts(ms, zone) {
  const date = new Date(ms);
  return zone === "local"
    ? [date.getFullYear(), date.getMonth(), date.getDate(), date.getHours(), date.getMinutes(), date.getSeconds()]
    : [
        date.getUTCFullYear(),
        date.getUTCMonth(),
        date.getUTCDate(),
        date.getUTCHours(),
        date.getUTCMinutes(),
        date.getUTCSeconds(),
      ];
}

/** An instant as a time of day, "02:14:03"; a dash for none. `step_s` below a minute shows seconds, else it may not. */
export function timeOfDay(ms, zone = "utc", step_s = 1) {
  if (ms === null || ms === undefined) return "–";
  const [, , , hour, minute, second] = parts(ms, zone);
  return step_s >= MINUTE ? `${two(hour)}:${two(minute)}` : `${two(hour)}:${two(minute)}:${two(second)}`;
}

/** An instant with its day, "2026-03-05 02:14:03"; a dash for none. */
export function instant(ms, zone = "utc") {
  if (ms === null || ms === undefined) return "–";
  const [year, month, day] = parts(ms, zone);
  return `${year}-${two(month + 1)}-${two(day)} ${timeOfDay(ms, zone)}`;
}

/** The zone in which times are shown, in a word. */
export function zoneWord(zone) {
  return zone === "utc" ? "UTC" : "local";
}

/** An instant beside `now`: the time of day, and its day too where that differs. */
export function near(ms, now_ms, zone = "utc") {
  if (ms === null || ms === undefined) return "–";
  const same = parts(ms, zone).slice(0, 3).join() === parts(now_ms, zone).slice(0, 3).join();
  return same ? timeOfDay(ms, zone) : instant(ms, zone);
}

/** A whole number with thousands set apart. */
export function count(number) {
  if (number === null || number === undefined) return "–";
  return Math.round(number).toLocaleString("en-GB");
}

/** A number in little room: 940, 12.4 k, 3.1 M. */
export function brief(number) {
  if (number === null || number === undefined) return "–";
  const size = Math.abs(number);
  for (const [unit, name] of [
    [1e9, "G"],
    [1e6, "M"],
    [1e4, "k"],
  ]) {
    if (size >= unit) return `${(number / (name === "k" ? 1e3 : unit)).toFixed(size / unit < 10 ? 1 : 0)} ${name}`;
  }
  return size < 10 && size % 1 ? number.toFixed(1) : count(number);
}

/** "1 event", "3 events": a count with its noun. */
export function counted(number, noun) {
  return `${count(number)} ${noun}${number === 1 ? "" : "s"}`;
}

/** A share from 0 to 1 as a percentage with two figures that matter. */
export function share(value) {
  if (value === null || value === undefined || !Number.isFinite(value)) return "–";
  const percent = value * 100;
  if (percent === 0) return `0${KEPT}%`;
  if (percent < 0.001) return `<${KEPT}0.001${KEPT}%`;
  return `${Number(percent.toPrecision(percent >= 10 ? 3 : 2))}${KEPT}%`;
}

/** A name without characters that could steer the text around it; each is shown as a replacement mark. */
export function clean(name) {
  return String(name ?? "").replace(CONTROLS, "\ufffd");
}

/** A name to show: clean, and in the middle cut to so many graphemes. */
export function shown(name, at_most = GRAPHEMES_AT_MOST) {
  const text = clean(name);
  if (text.trim() === "") return text === "" ? "(no name)" : `“${text.slice(0, 12)}” (blank)`;
  if (text.length <= at_most) return stacked([text])[0];
  const cells = Array.from(segmenter.segment(text.slice(0, 2048)), (each) => each.segment);
  if (cells.length <= at_most && text.length <= 2048) return stacked(cells).join("");
  const tail = Math.floor(at_most / 3);
  return `${stacked(cells.slice(0, at_most - tail - 1)).join("")}…${stacked(cells.slice(-tail)).join("")}`;
}

/** Graphemes with at most two combining marks each: more of them would be drawn over the neighbouring lanes. */
function stacked(cells) {
  return cells.map((cell) => cell.replace(/(\p{Mn}{2})\p{Mn}+/gu, "$1"));
}

/** A name for a canvas, where no element isolates it: between first-strong isolate and its end. */
export function isolated(name) {
  return `${FSI}${name}${PDI}`;
}
