// The whole view as a query string and back, so that a link shows another person the same. Pure: no DOM.

import { WINDOWS_S } from "./scales.js";

export const LANES_AT_ONCE = [8, 20, 50, 100];
const SEARCH_AT_MOST = 256;

/** What a page shows when its address says nothing. `window_s` null: as far as the output is behind. */
function plainView() {
  return { feed: null, window_s: null, at_ms: null, search: "", lanes: 20, table: false, zone: "utc" };
}

/** The view that a query string names; what it cannot mean is left at its plain value. */
export function readView(query) {
  const given = new URLSearchParams(query),
    view = plainView();
  view.feed = given.get("feed") || null;
  const window_s = Number(given.get("window"));
  if (WINDOWS_S.includes(window_s)) view.window_s = window_s;
  const at_ms = Date.parse(given.get("at") ?? "");
  if (Number.isFinite(at_ms)) view.at_ms = at_ms;
  view.search = (given.get("q") ?? "").slice(0, SEARCH_AT_MOST);
  const lanes = Number(given.get("lanes"));
  if (LANES_AT_ONCE.includes(lanes)) view.lanes = lanes;
  view.table = given.get("view") === "table";
  if (given.get("zone") === "local") view.zone = "local";
  return view;
}

/** The query string of a view, with only what differs from a plain one. */
export function writeView(view) {
  const given = new URLSearchParams();
  if (view.feed) given.set("feed", view.feed);
  if (view.window_s) given.set("window", String(view.window_s));
  if (view.at_ms !== null) given.set("at", new Date(view.at_ms).toISOString());
  if (view.search) given.set("q", view.search);
  if (view.lanes !== plainView().lanes) given.set("lanes", String(view.lanes));
  if (view.table) given.set("view", "table");
  if (view.zone === "local") given.set("zone", "local");
  const text = given.toString();
  return text ? `?${text}` : "";
}
