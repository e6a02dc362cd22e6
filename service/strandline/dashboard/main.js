// The page: its view, the feed it follows, and what is shown when. Data comes in by the stream and by the history;
// words go to the panels, pictures to their canvases. A tab in the background keeps only the newest moment.

import { Acts, askToken } from "./acts.js";
import { readView, writeView } from "./address.js";
import { Api, LiveStream, Problem } from "./api.js";
import { ClusterView } from "./cluster_view.js";
import { Controls } from "./controls.js";
import { byId, keyed, setAttribute, setSentence, setText } from "./dom.js";
import { age, clean, instant, zoneWord } from "./format.js";
import { showIntakes } from "./intakes_view.js";
import { laneSentence } from "./lanes.js";
import { showBooks, showHappened, showHops, showSentence, showSinks, showWords, Speaker } from "./panels.js";
import { Pictures } from "./pictures.js";
import { Record } from "./record.js";
import { behind_s } from "./reading.js";
import { followReport, reportAddress } from "./report.js";
import { nothingKept, speak } from "./sentence.js";
import { showTable } from "./table.js";

const POINTS = 600,
  FEEDS_AGAIN_MS = 2000,
  HISTORY_AFTER_MS = 200,
  HISTORY_AGAIN_MS = 2000;
const TABLE_SEEN_MS = 900,
  TABLE_HIDDEN_MS = 5000,
  BOOKS_EVERY_MS = 900,
  FROZEN_EVERY_MS = 1500;
const LINKS = { connecting: "○ connecting", live: "● live", lost: "▲ lost", elsewhere: "◇ not here" };

class Page {
  view = readView(location.search);
  record = new Record();
  live = null;
  past = null; // what the last question for the past has come to: { at_ms, problem }
  raw = null;
  strayed = false; // the feed of the view is a partition that is not at work here
  link = { state: "connecting", why: "", since_ms: Date.now() };
  drawn = 0;
  shownAt = {};

  constructor() {
    this.api = new Api(askToken);
    this.acts = new Acts(
      this.api,
      () => this.view.feed,
      (slack_s) => this.pictures.slackWords(slack_s),
    );
    this.openAct = (act, subject, given) => this.acts.open(act, subject, given);
    this.pictures = new Pictures(() => this.want());
    this.controls = new Controls(this);
    this.speaker = new Speaker();
    this.cluster = new ClusterView(
      this.api,
      (feed) => this.change({ feed, at_ms: null }),
      () => this.#clustered(),
    );
    this.stream = new LiveStream(
      this.api,
      (data) => this.#moment(data),
      (state, why) => this.#linked(state, why),
    );
    this.#listen();
    this.controls.show(this.view, null);
    this.start();
  }

  #listen() {
    byId("set-slack").addEventListener("click", () => this.#setSlack());
    byId("end-slack").addEventListener("click", () => this.openAct("slack_end", this.view.feed));
    byId("drain").addEventListener("click", () => this.openAct("drain", this.view.feed));
    byId("chosen-excuse").addEventListener("click", () => this.excuseChosen());
    byId("report").addEventListener("click", (event) => followReport(event, this.api, this.view.feed));
    addEventListener("popstate", () => {
      const view = readView(location.search);
      this.change({ ...view, feed: view.feed ?? this.view.feed }, false);
    });
    document.addEventListener("visibilitychange", () => this.#seen());
    setInterval(() => this.#tick(), 1000);
  }

  /** Learn the feeds, then follow one. Tries until the service answers. */
  async start() {
    for (;;) {
      try {
        const answer = await this.api.json("/v1/feeds");
        const names = answer.feeds.map((each) => each.name);
        if (answer.cluster) await this.cluster.begin();
        this.names = names;
        if (!names.length && !this.cluster.document)
          throw new Problem(
            0,
            "There is no feed to see",
            "The configuration names none, or the token may read none.",
          );
        if (!names.includes(this.view.feed) && !this.cluster.knows(this.view.feed)) this.view.feed = names[0] ?? null;
        this.#list();
        history.replaceState(null, "", location.pathname + writeView(this.view));
        this.follow();
        return;
      } catch (error) {
        this.#linked("lost", error instanceof Problem ? `${error.title}. ${error.detail ?? ""}` : String(error));
        await new Promise((done) => setTimeout(done, FEEDS_AGAIN_MS));
      }
    }
  }

  /** Follow the feed of the view from the beginning. */
  follow() {
    this.record.clear();
    this.live = this.past = this.raw = null;
    this.#list();
    this.strayed = this.cluster.isElsewhere(this.view.feed);
    if (this.strayed) this.#stray();
    this.#open();
    this.#history(0);
  }

  /** The feeds to choose from: partitions that are at work here, those that are none, and the one that is shown. */
  #list() {
    const { feed } = this.view,
      elsewhere = this.cluster.isElsewhere(feed) ? feed : null;
    const plain = this.names.filter((each) => !this.cluster.knows(each)); // the cluster may be heard of later
    const names = [...plain, ...this.cluster.here()];
    this.controls.feeds(elsewhere === null ? names : [...names, elsewhere], feed, elsewhere);
  }

  /** The cluster was asked. A partition that is followed may have gone, or come. */
  #clustered() {
    if (this.names === undefined) return; // it begins
    const { feed } = this.view,
      here = this.cluster.here();
    if (this.cluster.failed !== null) {
      if (this.strayed) this.#linkedAs("lost", this.cluster.failed);
    } else if (feed === null && here.length) this.change({ feed: here[0] });
    else if (this.cluster.isElsewhere(feed)) this.#stray();
    else if (this.strayed) this.follow();
    this.#list();
    this.cluster.show(this.view.feed, this.view.zone);
    this.want();
  }

  /** Say where the partition is; nothing is asked about it here until it is back. */
  #stray() {
    this.strayed = true;
    this.stream.close();
    this.#linkedAs("elsewhere", "");
    this.cluster.showElsewhere(this.view.feed, this.live, this.view.zone, this.speaker);
  }

  #open() {
    if (this.strayed) return;
    const query = new URLSearchParams({ lanes: String(this.view.lanes) });
    if (this.view.search) query.set("q", this.view.search);
    this.fresh = true; // what comes next may be of other lanes: it is shown at once
    this.stream.open(`/v1/feeds/${encodeURIComponent(this.view.feed)}/live?${query}`);
  }

  /** Another view; what depends on what changed is fetched again. */
  change(changes, write = true) {
    const before = { ...this.view };
    Object.assign(this.view, changes);
    const differs = (name) => before[name] !== this.view[name];
    if (write)
      history[differs("feed") ? "pushState" : "replaceState"](null, "", location.pathname + writeView(this.view));
    if (differs("feed")) this.follow();
    else {
      if (differs("search") || differs("lanes")) this.#open();
      if (differs("at_ms") || differs("window_s")) this.#history(HISTORY_AFTER_MS);
    }
    this.controls.show(this.view, this.nowMs());
    this.pictures.stale = true;
    this.shownAt = {};
    this.want();
  }

  nowMs() {
    return this.live?.now_ms ?? null;
  }

  /** The window in which a person moves, in seconds: the chosen one, else that of the lanes. */
  window_s() {
    const moment = this.#shown();
    return this.view.window_s ?? (moment ? this.pictures.windows(moment, this.view).lanes_s : 60);
  }

  /** Fetch the past that the pictures need, after a moment in which more may change. */
  #history(after_ms) {
    clearTimeout(this.waiting);
    this.waiting = setTimeout(() => this.#fetchHistory(), after_ms);
  }

  /** An answer that another question has overtaken is of another time, or of another feed: it is passed over. */
  async #fetchHistory() {
    if (this.strayed) return;
    const { feed, at_ms, window_s } = this.view,
      asked = (this.asked = Symbol());
    const to_ms = Math.round(at_ms ?? this.nowMs() ?? Date.now());
    const clock_s = this.live ? this.pictures.windows(this.live, this.view).clock_s : Math.max(300, window_s ?? 0);
    const query = new URLSearchParams({
      from_ms: String(Math.floor(to_ms - (clock_s + 60) * 1000)),
      to_ms: String(to_ms + 1000),
      points: String(POINTS),
    });
    let found = null,
      problem = null;
    try {
      found = await this.api.json(`/v1/feeds/${encodeURIComponent(feed)}/history?${query}`);
    } catch (error) {
      if (!(error instanceof Problem)) throw error;
      problem = error;
    }
    if (asked !== this.asked || feed !== this.view.feed) return;
    this.past = { at_ms, problem };
    if (problem?.mayPass) this.#history(HISTORY_AGAIN_MS);
    if (found) {
      this.record.load(found);
      this.historyOf_s = clock_s;
      this.pictures.stale = true;
      this.shownAt = {};
    }
    this.want();
  }

  #moment(data) {
    this.raw = data;
    if (document.hidden) return;
    this.#take();
  }

  /** Take the newest moment over and ask for a frame. */
  #take() {
    if (this.raw === null) return;
    this.live = JSON.parse(this.raw);
    this.raw = null;
    this.live.lanes ??= [];
    this.cluster.showHere();
    if (this.fresh) this.shownAt = {};
    this.fresh = false;
    this.record.append(this.live);
    const { clock_s } = this.pictures.windows(this.live, this.view);
    if (this.view.at_ms === null && this.historyOf_s && clock_s > this.historyOf_s) {
      this.historyOf_s = clock_s;
      this.#history(HISTORY_AFTER_MS);
    }
    if (this.view.at_ms === null || this.#due("frozen", FROZEN_EVERY_MS)) this.want();
  }

  /** A stream that ends in a cluster may be that of a partition that moved: that is found out before it is lost. */
  async #linked(state, why) {
    if (state === "lost") await this.cluster.poll();
    if (!this.strayed) this.#linkedAs(state, why);
  }

  #linkedAs(state, why) {
    if (state === "live" && this.link.state !== "live" && this.record.t_ms.length) this.#history(HISTORY_AGAIN_MS);
    if (state === this.link.state && why === this.link.why) return;
    const lost = state === "connecting" && this.link.state === "lost"; // trying again does not make it less lost
    if (lost) return;
    this.link = { state, why, since_ms: this.link.state === state ? this.link.since_ms : Date.now() };
    this.#showLink();
  }

  #showLink() {
    const { state, why, since_ms } = this.link,
      place = byId("link");
    setText(place, LINKS[state]);
    setAttribute(document.body, "data-link", state);
    if (state !== "lost") return;
    setAttribute(byId("now"), "data-level", "bad");
    const last = this.live ? ` What stands here is from ${instant(this.live.now_ms, this.view.zone)}.` : "";
    const lost_s = Math.floor((Date.now() - since_ms) / 1000);
    setSentence(byId("says"), [`No word from the service${lost_s ? ` for ${age(lost_s)}` : ""}.${last}`]);
    setSentence(byId("next"), [`${why} This page tries again by itself.`]);
    keyed(byId("offers"), [], String);
    setText(byId("spoken"), "No word from the service. This page tries again by itself.");
  }

  #seen() {
    if (document.hidden) return;
    this.#take();
    if (this.record.t_ms.length) this.#history(0);
    this.pictures.stale = true;
    this.want();
  }

  #tick() {
    if (document.hidden) return;
    if (this.link.state === "lost") this.#showLink();
    this.cluster.tick(performance.now());
  }

  /** Ask for one frame, however often. */
  want() {
    if (this.drawn || document.hidden) return;
    this.drawn = requestAnimationFrame(() => {
      this.drawn = 0;
      this.#draw();
    });
  }

  /** What is shown: the live moment, or the feed as it was at the frozen time. */
  #shown() {
    if (this.view.at_ms === null || !this.live) return this.live;
    return this.record.momentAt(this.view.at_ms, this.live);
  }

  #due(what, every_ms) {
    const now_ms = performance.now();
    if (now_ms - (this.shownAt[what] ?? -Infinity) < every_ms) return false;
    this.shownAt[what] = now_ms;
    return true;
  }

  #draw() {
    const moment = this.#shown();
    document.body.classList.toggle("unknown", !moment && this.live !== null);
    if (!moment) {
      if (this.live) this.#nothingKept();
      return;
    }
    const { zone, table } = this.view;
    setText(byId("clock"), `${instant(moment.now_ms, zone)} ${zoneWord(zone)}`);
    const spoken = speak(moment, zone, this.cluster.troubles());
    if (["live", "connecting"].includes(this.link.state)) {
      showSentence(spoken, moment, this.openAct);
      if (this.view.at_ms === null) this.speaker.say(spoken, performance.now());
    }
    if (!this.strayed) this.#title(spoken, moment);
    if (this.#due("hops", BOOKS_EVERY_MS)) showHops(moment, spoken);
    this.pictures.draw(moment, this.record, this.view);
    this.#chosen(moment);
    if (this.#due("table", table ? TABLE_SEEN_MS : TABLE_HIDDEN_MS)) showTable(moment, zone, this.openAct, table);
    if (this.#due("books", BOOKS_EVERY_MS)) this.#slower(moment, zone);
    const pointed = this.pictures.pointed(this.record, zone);
    if (pointed) setText(byId("behind-says"), pointed);
  }

  /** Nothing is known of the frozen time: nothing is kept of it, or it has not come yet. */
  #nothingKept() {
    const when = instant(this.view.at_ms, this.view.zone),
      [says, next] = nothingKept(this.view.at_ms, when, this.past);
    setText(byId("clock"), `${when} ${zoneWord(this.view.zone)}`);
    setAttribute(byId("now"), "data-level", "watch");
    setSentence(byId("says"), [says]);
    setSentence(byId("next"), [next]);
    keyed(byId("offers"), [], String);
    keyed(byId("stalls"), [], String);
  }

  /** What need not move twice a second. */
  #slower(moment, zone) {
    showBooks(moment);
    showSinks(moment, zone, this.openAct);
    showIntakes(moment, zone);
    this.cluster.show(this.view.feed, zone);
    showWords(moment, this.record);
    showHappened(this.record, moment, zone);
    byId("drain").disabled = byId("set-slack").disabled = Boolean(moment.past); // acts are for the present
    const set = this.record.acts.findLast((act) => act.act === "slack"),
      inForce = set && set.slack_s !== null && Date.parse(set.until ?? "") > moment.now_ms;
    byId("end-slack").hidden = !inForce || Boolean(moment.past);
    const { clock_s } = this.pictures.windows(moment, this.view),
      to_ms = moment.now_ms;
    setAttribute(byId("report"), "href", reportAddress(this.view.feed, to_ms - clock_s * 1000, to_ms));
    this.controls.show(this.view, this.nowMs());
  }

  #title(spoken, moment) {
    const sign = { fine: "", watch: "△ ", bad: "▲ " }[spoken.level],
      behind = behind_s(moment);
    const how = behind === null ? "" : ` ${age(Math.round(behind))} behind`;
    const title = `${sign}${clean(moment.feed)}${how} – Strandline`;
    if (document.title !== title) document.title = title;
  }

  #chosen(moment) {
    const lane = moment.lanes.find((each) => each.source === this.pictures.selected);
    const words = lane
      ? [{ name: lane.source }, laneSentence(moment, lane, this.view.zone)]
      : ["Choose a lane to see it in words."];
    setSentence(byId("chosen-says"), words);
    byId("chosen-excuse").hidden = !lane || lane.excused || Boolean(moment.past);
  }

  /** Excuse the source of the chosen lane, after a confirmation. */
  excuseChosen() {
    const lane = this.live?.lanes.find((each) => each.source === this.pictures.selected);
    if (lane && !lane.excused) this.openAct("excuse", lane.source);
  }

  #setSlack() {
    const slack_s = this.pictures.chosenSlack_s ?? this.live?.slack_s ?? 5;
    this.openAct("slack", this.view.feed, {
      slack: slack_s < 1 ? `${Number((slack_s * 1000).toPrecision(2))}ms` : `${Number(slack_s.toPrecision(2))}s`,
    });
  }
}

new Page();
