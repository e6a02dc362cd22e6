// One canvas and what every picture needs of it: its size without reading the layout while drawing, the device's
// pixels, the colours of the page's theme, and widths of texts, which are measured once.

const WIDTHS_AT_MOST = 4000;
const COLOURS = [
  "paper",
  "panel",
  "ink",
  "quiet",
  "rule",
  "released",
  "strand",
  "late",
  "silent",
  "ahead",
  "slack",
  "warn",
  "fine",
  "hold",
  "hold-text",
  "late-text",
];
const widths = new Map();
const patterns = new Map();
let colours = null;

/** The theme's colours, read from the style sheet once until forgetColours(). */
export function palette() {
  if (colours === null) {
    const style = getComputedStyle(document.documentElement);
    colours = Object.fromEntries(COLOURS.map((name) => [name, style.getPropertyValue(`--${name}`).trim()]));
  }
  return colours;
}

/** To be called when the theme changes. */
export function forgetColours() {
  colours = null;
}

/** A canvas that fills its parent's width; its height is set by whoever draws. Sizes are in CSS pixels. */
export class Surface {
  constructor(canvas, onResize) {
    this.canvas = canvas;
    this.context = canvas.getContext("2d", { alpha: true });
    this.width = 0;
    this.height = 0;
    this.visible = true;
    this.em = 14;
    this.#watch(onResize);
  }

  #watch(onResize) {
    const parent = this.canvas.parentElement;
    new ResizeObserver((entries) => {
      const width = Math.floor(entries[0].contentRect.width);
      const em = parseFloat(getComputedStyle(document.documentElement).fontSize) * 0.8125;
      if (width === this.width && em === this.em && this.ratio === devicePixelRatio) return;
      this.width = width;
      this.em = em;
      this.ratio = 0;
      onResize();
    }).observe(parent);
    new IntersectionObserver(
      (entries) => {
        const before = this.visible;
        this.visible = entries[entries.length - 1].isIntersecting;
        if (this.visible && !before) onResize();
      },
      { rootMargin: "100px" },
    ).observe(this.canvas);
  }

  /** A clean canvas of this height, ready to draw in CSS pixels; null where there is nothing to be seen. */
  begin(height) {
    if (this.width < 40 || !this.visible) return null;
    if (this.ratio !== devicePixelRatio || this.height !== height) this.#resize(height);
    const context = this.context;
    context.setTransform(this.ratio, 0, 0, this.ratio, 0, 0);
    context.clearRect(0, 0, this.width, this.height);
    context.textBaseline = "middle";
    context.lineJoin = "round";
    return context;
  }

  #resize(height) {
    this.ratio = devicePixelRatio;
    this.height = height;
    this.canvas.width = Math.round(this.width * this.ratio);
    this.canvas.height = Math.round(height * this.ratio);
    this.canvas.style.height = `${height}px`;
    this.canvas.style.width = `${this.width}px`;
  }

  /** Set the font: a size as a multiple of the page's small text, and a weight. */
  font(size = 1, weight = 400) {
    const wanted = `${weight} ${(this.em * size).toFixed(2)}px system-ui, "DejaVu Sans", sans-serif`;
    if (this.fontNow !== wanted || this.context.font === "10px sans-serif") this.context.font = wanted;
    this.fontNow = wanted;
  }

  /** The width of a text in the present font. */
  measure(text) {
    const key = `${this.fontNow}|${text}`;
    let width = widths.get(key);
    if (width === undefined) {
      if (widths.size > WIDTHS_AT_MOST) widths.clear();
      width = this.context.measureText(text).width;
      widths.set(key, width);
    }
    return width;
  }

  /** The text, its middle cut out so that it fits into a width. */
  fit(text, width) {
    if (this.measure(text) <= width) return text;
    const cells = Array.from(text);
    let low = 1,
      high = cells.length - 1,
      best = "…";
    while (low <= high) {
      const keep = (low + high) >> 1,
        tail = Math.floor(keep / 3);
      const cut = `${cells.slice(0, keep - tail).join("")}…${tail ? cells.slice(-tail).join("") : ""}`;
      if (this.measure(cut) <= width) {
        best = cut;
        low = keep + 1;
      } else high = keep - 1;
    }
    return best;
  }
}

/** A line on whole device pixels, so that a hairline is one. */
export function crisp(value) {
  return Math.round(value) + 0.5;
}

/** A straight line in the present stroke style. */
export function line(context, x0, y0, x1, y1) {
  context.beginPath();
  context.moveTo(x0, y0);
  context.lineTo(x1, y1);
  context.stroke();
}

/** Diagonal hatching within a rectangle: a pattern, drawn once for each colour and step. */
export function hatch(context, x, y, width, height, step, colour) {
  if (width < 0.5) return;
  const ratio = devicePixelRatio,
    key = `${colour}|${step}|${ratio}`;
  let pattern = patterns.get(key);
  if (!pattern) {
    pattern = context.createPattern(hatching(step, colour, ratio), "repeat");
    pattern.setTransform(new DOMMatrix().scale(1 / ratio));
    patterns.set(key, pattern);
  }
  context.fillStyle = pattern;
  context.fillRect(x, y, width, height);
}

function hatching(step, colour, ratio) {
  const size = Math.round(step * ratio),
    tile = new OffscreenCanvas(size, size),
    context = tile.getContext("2d");
  context.strokeStyle = colour;
  context.lineWidth = ratio;
  context.beginPath();
  for (const shift of [-size, 0, size]) {
    context.moveTo(shift - 1, size + 1);
    context.lineTo(shift + size + 1, -1);
  }
  context.stroke();
  return tile;
}
