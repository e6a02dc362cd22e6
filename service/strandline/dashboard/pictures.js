// The canvases of the page and when each is drawn: the lanes with every moment, the arrival clock once a second, the
// rest only where its data changed. What is scrolled out of sight is not drawn.

import { byId, setText } from "./dom.js";
import { age, near, share } from "./format.js";
import { drawLanes, laneAt } from "./lanes.js";
import { fittingWindow, lastAtOrBelow } from "./scales.js";
import { drawRuns, drawSlacks, rowNear, slackSentence } from "./slacks.js";
import { behind_s } from "./reading.js";
import { forgetColours, Surface } from "./surface.js";
import { drawBehind, drawLateness, drawShare, HOLDS } from "./tide.js";

const CLOCK_EVERY_MS = 900,
  CLOCK_WINDOW_AT_LEAST_S = 300;
const LANES_FITS_AT_MOST = 8;
const SLACK_LEAST_S = 0.001; // below it an event is late for a clock's tick: no slack that anybody chooses

/** All pictures of the page. `onWanted` is called when one must be drawn again. */
export class Pictures {
  constructor(onWanted) {
    const wanted = () => {
      this.stale = true;
      onWanted();
    };
    for (const name of ["lanes", "behind", "lateness", "share", "slacks", "runs"])
      this[name] = new Surface(byId(name), wanted);
    this.stale = true;
    this.wanted = wanted;
    this.selected = null;
    this.chosenSlack_s = null;
    this.cursor_ms = null;
    this.keys = {};
    this.clockAt_ms = -Infinity;
    this.#listen();
  }

  /** The theme or the fonts changed. */
  repaint() {
    forgetColours();
    this.wanted();
  }

  #listen() {
    const slacks = byId("slacks");
    slacks.addEventListener("pointermove", (event) => this.#chooseSlack(event.offsetX));
    slacks.addEventListener("pointerleave", () => this.#chooseSlack(null));
    byId("slacks-box").addEventListener("keydown", (event) => this.#stepSlack(event));
    for (const name of ["behind", "lateness", "share"]) {
      const canvas = byId(name);
      canvas.addEventListener("pointermove", (event) => this.#point(event.offsetX));
      canvas.addEventListener("pointerleave", () => this.#point(null));
    }
    byId("lanes").addEventListener("click", (event) => this.#pick(event));
  }

  #chooseSlack(x) {
    this.chosenSlack_s = x === null || !this.slackAxis ? null : this.slackAxis.x.invert(x);
    this.keys.slacks = null;
    this.wanted();
  }

  #stepSlack(event) {
    const step = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    if (!step || !this.slackAxis) return;
    const rows = this.slackAxis.rows,
      now = rowNear(rows, this.chosenSlack_s ?? this.slackNow_s);
    const next = rows[Math.max(0, Math.min(rows.length - 1, rows.indexOf(now) + step))];
    this.chosenSlack_s = next[0];
    this.keys.slacks = null;
    event.preventDefault();
    this.wanted();
  }

  #point(x) {
    this.cursor_ms = x === null || !this.clockPlace ? null : this.clockPlace.x.invert(x);
    this.clockAt_ms = -Infinity;
    this.wanted();
  }

  #pick(event) {
    if (!this.place || !this.lanesShown) return;
    const index = laneAt(this.place, this.lanesShown.length, event.offsetY);
    if (index >= 0) this.select(this.lanesShown[index].source);
  }

  /** Choose a lane by its source; null for none. */
  select(source) {
    this.selected = source;
    this.wanted();
  }

  /** The lane so many below the chosen one. */
  step(by) {
    const lanes = this.lanesShown ?? [];
    if (!lanes.length) return;
    const now = lanes.findIndex((lane) => lane.source === this.selected);
    this.select(lanes[Math.max(0, Math.min(lanes.length - 1, now < 0 ? 0 : now + by))].source);
  }

  /** The windows in use, in seconds: of the lanes, and of the pictures on the arrival clock. */
  windows(moment, view) {
    const behind = behind_s(moment) ?? 0;
    this.fit_s = fittingWindow(Math.max(behind, moment.slack_s), this.fit_s ?? null);
    return {
      // Events leave the lanes as they are released: a window of hours would show them as a hair at its edge.
      lanes_s: Math.min(view.window_s ?? this.fit_s, LANES_FITS_AT_MOST * this.fit_s),
      clock_s: view.window_s ?? Math.max(CLOCK_WINDOW_AT_LEAST_S, this.fit_s),
    };
  }

  /** Draw what needs it. */
  draw(moment, record, view) {
    const { lanes_s, clock_s } = this.windows(moment, view),
      force = this.stale;
    this.stale = false;
    this.lanesShown = moment.lanes;
    if (!view.table) {
      this.place = drawLanes(this.lanes, moment, {
        window_s: lanes_s,
        zone: view.zone,
        selected: this.selected,
        past: view.at_ms !== null,
      });
    }
    const clock_ms = moment.now_ms;
    const pixel_ms = (clock_s * 1000) / Math.max(1, this.behind.width); // what moved by less is not drawn again
    if (force || Math.abs(clock_ms - this.clockAt_ms) >= Math.max(CLOCK_EVERY_MS, pixel_ms))
      this.#drawClock(moment, record, view, clock_ms, clock_s);
    this.#drawRest(moment, force);
  }

  #drawClock(moment, record, view, to_ms, clock_s) {
    this.clockAt_ms = to_ms;
    const look = {
      from_ms: to_ms - clock_s * 1000,
      to_ms,
      zone: view.zone,
      acts: record.acts,
      steering: moment.steering,
      cursor_ms: this.cursor_ms,
    };
    this.clockPlace = drawBehind(this.behind, record, look) ?? this.clockPlace;
    drawLateness(this.lateness, record, look);
    drawShare(this.share, record, look);
  }

  #drawRest(moment, force) {
    const target = moment.steering?.late_share_target ?? null,
      rows = (moment.slacks ?? []).filter((row) => row[0] >= SLACK_LEAST_S || row[0] === moment.slack_s);
    const key = `${moment.slack_s.toPrecision(2)}|${target}|${rows.map((row) => row[1]?.toPrecision(2)).join()}`;
    if (force || key !== this.keys.slacks) {
      this.keys.slacks = key;
      this.slackNow_s = moment.slack_s;
      const chosen = rowNear(rows, this.chosenSlack_s ?? moment.slack_s);
      this.slackAxis =
        drawSlacks(this.slacks, rows, { slack_s: moment.slack_s, target, chosen, past: moment.past }) ??
        this.slackAxis;
      setText(
        byId("slacks-says"),
        slackSentence(rows, moment.slack_s, this.chosenSlack_s === null ? suggestion(rows, moment.slack_s) : chosen),
      );
    }
    const runs = moment.held.longest_runs.join();
    if (force || runs !== this.keys.runs) {
      this.keys.runs = runs;
      drawRuns(this.runs, moment.held.longest_runs, moment.past);
    }
  }

  /** What a slack of so many seconds would give, in words. */
  slackWords(slack_s) {
    const rows = this.slackAxis?.rows ?? [];
    return rows.length ? slackSentence(rows, this.slackNow_s, rowNear(rows, slack_s)) : "";
  }

  /** What stood at the pointer on the arrival clock, in words; "" for no pointer. */
  pointed(record, zone) {
    if (this.cursor_ms === null) return "";
    const index = lastAtOrBelow(record.t_ms, this.cursor_ms);
    if (index < 0) return "";
    const at_ms = record.t_ms[index],
      hold = record.holds.find((each) => each.from_ms <= at_ms && each.to_ms >= at_ms);
    const who = hold ? `; ${HOLDS[hold.why]?.[0] ?? hold.why}` : "";
    return (
      `${near(at_ms, record.t_ms[record.t_ms.length - 1], zone)}: ${age(record.behind_s[index])} behind, slack ` +
      `${age(record.slack_s[index])}, ${share(record.late_share[index])} late${who}`
    );
  }
}

/** Another slack worth a word where nobody points at one: half of the present one; a second where there is none. */
function suggestion(rows, slack_s) {
  return rowNear(rows, slack_s > 0 ? slack_s / 2 : 1);
}
