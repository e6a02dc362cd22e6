// The view of the cluster: asks for it every two seconds, and shows instances and partitions, what needs eyes first.
// It is there only where the service is in a cluster. What is said of it is in `cluster`.

import { Problem } from "./api.js";
import {
  addressOf,
  clusterTrouble,
  elsewhereWords,
  eyesFirst,
  instancesOf,
  listenOf,
  partitionOf,
  runningHere,
  stateOf,
  verdictOf,
} from "./cluster.js";
import { byId, keyed, make, nameElement, setAttribute, setSentence, setText } from "./dom.js";
import { age, clean, count, instant, near } from "./format.js";

const EVERY_MS = 2000,
  WITHIN_MS = 4000,
  PARTITIONS_AT_FIRST = 12;
const COLUMNS = ["state", "behind", "age", "owner", "since"];

/** The cluster as it was heard of last. `choose(feed)` follows a feed; `heard()` is called with each answer. */
export class ClusterView {
  document = null; // null: none yet, or there is no cluster
  failed = null; // why the last question was not answered
  #on = false;
  #all = false;
  #asked_ms = -Infinity;
  #under = null;
  #level = "fine";

  constructor(api, choose, heard) {
    this.api = api;
    this.choose = choose;
    this.heard = heard;
    byId("partitions-all").addEventListener("click", () => {
      this.#all = !this.#all;
      this.show();
    });
  }

  /** There is a cluster: ask for it now, and from now on. */
  begin() {
    this.#on = true;
    return this.poll();
  }

  /** Ask if that is due. */
  tick(now_ms) {
    if (this.#on && now_ms - this.#asked_ms >= EVERY_MS) this.poll();
  }

  /** Ask now; one question at a time. Does not throw: whether the service answers is told by the stream. */
  poll() {
    if (!this.#on) return Promise.resolve();
    this.#asked_ms = performance.now();
    this.#under ??= this.#ask().finally(() => {
      this.#under = null;
    });
    return this.#under;
  }

  async #ask() {
    try {
      this.document = await this.api.json("/v1/cluster", { signal: AbortSignal.timeout(WITHIN_MS) });
      this.failed = null;
    } catch (error) {
      this.failed = error instanceof Problem ? `${error.title}. ${error.detail ?? ""}` : "It does not answer.";
      if (error instanceof Problem && error.status === 404) {
        this.#on = false; // it was started again, without one
        this.document = null;
        byId("cluster").hidden = true;
      }
    }
    if (this.failed === null) this.show();
    this.heard();
  }

  /** The partitions that are at work here. */
  here() {
    return this.document === null ? [] : runningHere(this.document);
  }

  /** How it stands, for the sentence on top; what was heard too long ago says nothing. */
  troubles() {
    return this.failed === null ? clusterTrouble(this.document) : [];
  }

  /** Is this a partition, wherever it is? */
  knows(feed) {
    return this.document !== null && partitionOf(this.document, feed) !== null;
  }

  /** Is this feed a partition that is not at work here? So is none at all, where there is a cluster. */
  isElsewhere(feed) {
    if (this.document === null) return false;
    return feed === null || (this.knows(feed) && !this.here().includes(feed));
  }

  /** In the place of the feed's state: where it is. `last`: the last moment that was seen of it here, or null. */
  showElsewhere(feed, last, zone, speaker) {
    const seen = last && instant(last.now_ms, zone),
      spoken = elsewhereWords(this.document, feed, location, seen);
    setAttribute(byId("now"), "data-level", spoken.level);
    setSentence(byId("says"), spoken.says);
    setSentence(byId("next"), spoken.next);
    for (const id of ["offers", "stalls"]) keyed(byId(id), [], String);
    speaker.say(spoken, performance.now());
    document.title = `△ ${feed === null ? "nothing" : `${clean(feed)} is not`} here – Strandline`;
    const empty = last === null,
      { classList } = document.body;
    if (empty && !classList.contains("empty")) byId("cluster-box").open = true; // there is nothing else to see
    classList.toggle("empty", empty);
    document.querySelector(".facts").inert = true; // acts on it are for where it is
  }

  /** A moment of the feed has come: it is at work here. */
  showHere() {
    document.body.classList.remove("empty");
    document.querySelector(".facts").inert = false;
  }

  /** Show it; texts that did not change are not touched. `shown`: the feed that the page follows. */
  show(shown = this.shown, zone = this.zone) {
    Object.assign(this, { shown, zone });
    const cluster = this.document,
      box = byId("cluster-box");
    if (cluster === null) return;
    byId("cluster").hidden = false;
    const [level, words] = verdictOf(cluster);
    setText(byId("cluster-name"), cluster.name);
    setText(byId("cluster-says"), words);
    setAttribute(byId("cluster"), "data-level", level);
    if (level !== "fine" && this.#level === "fine") box.open = true; // it can be closed again, and then stays so
    this.#level = level;
    keyed(byId("instances"), instancesOf(cluster), (one) => one.name, makeInstance, updateInstance);
    const rows = eyesFirst(cluster.partitions),
      more = rows.length - PARTITIONS_AT_FIRST;
    keyed(
      byId("partitions"),
      this.#all ? rows : rows.slice(0, PARTITIONS_AT_FIRST),
      (row) => row.runtime,
      () => makePartition(),
      (element, row) => this.#partition(element, row),
    );
    byId("partitions-all").hidden = more <= 0;
    setText(byId("partitions-all"), this.#all ? "Show fewer" : `Show ${count(more)} more`);
  }

  #partition(element, row) {
    const [state, words] = stateOf(row, this.document.away_s === null && this.document.connected),
      cells = element.cells_,
      now_ms = Date.now();
    setAttribute(element, "data-state", state);
    this.#name(element, row);
    setText(cells.state, words);
    setText(cells.owner, row.owner ?? "–");
    setText(cells.since, row.since === null ? "–" : near(Date.parse(row.since), now_ms, this.zone));
    setText(cells.behind, count(row.behind_messages));
    setText(cells.age, age(row.watermark_age_s));
  }

  /** The name leads to the partition: here by a button, at another instance by a link, where its address is known. */
  #name(element, row) {
    const here = row.here && row.state === "owned",
      href = here ? null : addressOf(listenOf(this.document, row.owner), location, row.runtime),
      key = `${here} ${href}`;
    if (element.leads !== key) {
      element.leads = key;
      const lead = make(here ? "button" : href ? "a" : "span", "partition-name");
      if (here) lead.type = "button";
      if (here) lead.addEventListener("click", () => this.choose(row.runtime));
      if (href) lead.href = href;
      lead.append(nameElement(row.runtime));
      element.head.replaceChildren(lead);
    }
    setAttribute(element.head.firstElementChild, "aria-current", row.runtime === this.shown ? "true" : null);
  }
}

function makeInstance(one) {
  const item = make("li", "instance");
  item.head = make("span", "instance-name");
  item.words = make("span", "instance-words");
  item.owns = make("span", "instance-owns");
  item.append(item.head, item.words, item.owns);
  item.head.append(nameElement(one.name));
  return item;
}

function updateInstance(item, one) {
  const href = addressOf(one.listen, location, "");
  setAttribute(item, "data-state", one.state);
  setText(item.words, one.words);
  setText(item.owns, one.owns);
  if (item.leads === href) return;
  item.leads = href;
  const name = nameElement(one.name),
    link = make("a");
  if (href) link.href = href;
  if (href) link.append(name);
  item.head.replaceChildren(href ? link : name);
}

function makePartition() {
  const row = make("tr");
  row.head = make("th");
  row.head.scope = "row";
  row.append(row.head);
  row.cells_ = {};
  for (const name of COLUMNS) {
    row.cells_[name] = make("td", `partition-${name}`);
    row.append(row.cells_[name]);
  }
  return row;
}
