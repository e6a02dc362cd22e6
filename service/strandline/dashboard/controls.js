// What a person can turn: feed, window, frozen time, search, lanes, table, zone, colours; by pointer, keyboard, wheel.
// Each control changes the view; whoever owns the view hears of it.

import { LANES_AT_ONCE } from "./address.js";
import { byId, make, setAttribute, setText } from "./dom.js";
import { age, instant } from "./format.js";
import { WINDOWS_S } from "./scales.js";

const SEARCH_AFTER_MS = 300,
  THEMES = ["system", "light", "dark"],
  THEME_KEY = "strandline-theme";
const WHEEL_SHARE = 0.0012; // of the window for each pixel of the wheel

/** The controls of the page. `page`: { view, change(changes), nowMs(), window_s(), openAct, pictures }. */
export class Controls {
  constructor(page) {
    this.page = page;
    this.#fill();
    this.#time();
    this.#finding();
    this.#looks();
    for (const box of document.querySelectorAll(".canvas-box[tabindex]")) this.#keys(box);
    for (const id of ["lanes", "behind", "lateness", "share"]) this.#pointer(byId(id));
  }

  #fill() {
    const windows = byId("window");
    windows.append(new Option("to fit", ""), ...WINDOWS_S.map((each) => new Option(age(each), String(each))));
    byId("lanes-many").append(...LANES_AT_ONCE.map((each) => new Option(`${each} lanes`, String(each))));
  }

  #time() {
    byId("freeze").addEventListener("click", () => this.freeze());
    byId("earlier").addEventListener("click", () => this.scroll(-0.5));
    byId("later").addEventListener("click", () => this.scroll(0.5));
    byId("live").addEventListener("click", () => this.page.change({ at_ms: null }));
    byId("window").addEventListener("change", (event) =>
      this.page.change({ window_s: Number(event.target.value) || null }),
    );
    byId("feed").addEventListener("change", (event) => this.page.change({ feed: event.target.value, at_ms: null }));
  }

  #finding() {
    let waiting = 0;
    byId("search").addEventListener("input", (event) => {
      clearTimeout(waiting);
      waiting = setTimeout(() => this.page.change({ search: event.target.value.trim() }), SEARCH_AFTER_MS);
    });
    byId("lanes-many").addEventListener("change", (event) => this.page.change({ lanes: Number(event.target.value) }));
    byId("as-table").addEventListener("click", () => this.page.change({ table: !this.page.view.table }));
  }

  #looks() {
    byId("zone").addEventListener("click", () =>
      this.page.change({ zone: this.page.view.zone === "utc" ? "local" : "utc" }),
    );
    const button = byId("theme"),
      root = document.documentElement;
    const say = () => {
      const now = root.dataset.theme ?? "system";
      setText(button, `Colours: ${now}`);
      setAttribute(button, "aria-label", `Colours: ${now}. Change them`);
    };
    button.addEventListener("click", () => {
      const next = THEMES[(THEMES.indexOf(root.dataset.theme ?? "system") + 1) % THEMES.length];
      if (next === "system") delete root.dataset.theme;
      else root.dataset.theme = next;
      try {
        localStorage.setItem(THEME_KEY, next);
      } catch {
        // storage may be forbidden; the choice then holds until the page is loaded again
      }
      say();
      this.page.pictures.repaint();
    });
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => this.page.pictures.repaint());
    say();
  }

  /** Keys on a picture that has the focus; elsewhere they are left to the browser. */
  #keys(box) {
    box.addEventListener("keydown", (event) => {
      if (event.defaultPrevented || event.ctrlKey || event.metaKey || event.altKey) return;
      const lanes = box.id === "lanes-box";
      const act = {
        " ": () => this.freeze(),
        Home: () => this.page.change({ at_ms: null }),
        "+": () => this.zoom(-1),
        "=": () => this.zoom(-1),
        "-": () => this.zoom(1),
        ArrowLeft: () => this.scroll(event.shiftKey ? -1 : -0.1),
        ArrowRight: () => this.scroll(event.shiftKey ? 1 : 0.1),
        ...(lanes
          ? {
              ArrowUp: () => this.page.pictures.step(-1),
              ArrowDown: () => this.page.pictures.step(1),
              Enter: () => this.page.excuseChosen(),
            }
          : {}),
      }[event.key];
      if (!act) return;
      event.preventDefault();
      act();
    });
  }

  /** Sideways wheel (or shift and wheel) and dragging move through time; a plain wheel scrolls the page. */
  #pointer(canvas) {
    canvas.addEventListener(
      "wheel",
      (event) => {
        const by = event.shiftKey
          ? event.deltaY || event.deltaX
          : Math.abs(event.deltaX) > Math.abs(event.deltaY)
            ? event.deltaX
            : 0;
        if (!by || event.ctrlKey) return;
        event.preventDefault();
        this.scroll(by * WHEEL_SHARE);
      },
      { passive: false },
    );
    let from = null;
    canvas.addEventListener("pointerdown", (event) => {
      from = event.button === 0 ? { x: event.clientX, moved: false } : null;
    });
    canvas.addEventListener("pointermove", (event) => {
      if (from === null || !(event.buttons & 1) || (!from.moved && Math.abs(event.clientX - from.x) < 8)) return;
      from.moved = true;
      this.scroll((from.x - event.clientX) / canvas.clientWidth);
      from.x = event.clientX;
    });
    for (const end of ["pointerup", "pointercancel", "pointerleave"])
      canvas.addEventListener(end, () => {
        from = null;
      });
  }

  freeze() {
    const { view } = this.page;
    this.page.change({ at_ms: view.at_ms === null ? this.page.nowMs() : null });
  }

  /** Move the frozen time by a share of the window; at the present it is live again. */
  scroll(by) {
    const now_ms = this.page.nowMs(),
      from_ms = this.page.view.at_ms ?? now_ms;
    if (from_ms === null) return;
    const at_ms = Math.round(from_ms + by * this.page.window_s() * 1000);
    this.page.change({ at_ms: at_ms >= now_ms - 400 ? null : at_ms });
  }

  /** A shorter or a longer window. */
  zoom(by) {
    const now_s = this.page.window_s(),
      at = WINDOWS_S.findIndex((each) => each >= now_s);
    this.page.change({
      window_s: WINDOWS_S[Math.max(0, Math.min(WINDOWS_S.length - 1, (at < 0 ? WINDOWS_S.length - 1 : at) + by))],
    });
  }

  /** Show the view in the controls. */
  show(view, now_ms) {
    setAttribute(byId("freeze"), "aria-pressed", String(view.at_ms !== null));
    byId("later").disabled = byId("live").disabled = view.at_ms === null;
    byId("window").value = view.window_s ? String(view.window_s) : "";
    byId("lanes-many").value = String(view.lanes);
    if (view.feed) byId("feed").value = view.feed; // Back leads to another feed too
    if (document.activeElement !== byId("search")) byId("search").value = view.search;
    setAttribute(byId("as-table"), "aria-pressed", String(view.table));
    setText(byId("as-table"), view.table ? "Picture" : "Table");
    byId("lanes-box").hidden = view.table;
    byId("lanes-key").hidden = byId("chosen").hidden = view.table;
    byId("lanes-table").classList.toggle("hidden", !view.table);
    setAttribute(byId("zone"), "aria-pressed", String(view.zone === "local"));
    const ago = now_ms === null || view.at_ms === null ? "" : `, ${age((now_ms - view.at_ms) / 1000)} ago`;
    setText(byId("frozen"), view.at_ms === null ? "" : `Frozen at ${instant(view.at_ms, view.zone)}${ago}`);
    document.body.classList.toggle("past", view.at_ms !== null);
  }

  /** The feeds there are. */
  feeds(names, chosen, elsewhere = null) {
    const select = byId("feed"),
      key = JSON.stringify([names, elsewhere]);
    if (select.listed === key) return; // one that is open would close
    select.listed = key;
    select.replaceChildren(
      ...names.map((name) => {
        const option = make("option", "", name === elsewhere ? `${name} (not here)` : name);
        option.value = name;
        return option;
      }),
    );
    select.value = chosen;
  }
}
