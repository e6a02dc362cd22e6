// The lanes as a table: the same facts as the picture, for a screen reader and for whoever would rather read.

import { byId, keyed, make, nameElement, setText } from "./dom.js";
import { age, count, near } from "./format.js";
import { wordsOf } from "./lanes.js";
import { ROLES } from "./glyphs.js";

const COLUMNS = ["state", "newest", "behind", "heard", "held", "late"];

/** Bring the table up to a moment. Where it is not visible, its buttons are no stops of the tabulator. */
export function showTable(moment, zone, openAct, visible) {
  keyed(
    byId("lanes-rows"),
    moment.lanes,
    (lane) => lane.source,
    (lane) => makeRow(lane, openAct),
    (row, lane) => {
      const words = wordsOf(moment, lane, zone),
        role = ROLES[lane.role] ?? "";
      row.className = `role-${lane.role}`;
      setText(row.cells_.state, lane.role === "holding" ? `holds: ${words}` : role || "active");
      setText(row.cells_.newest, near(lane.newest_ms, moment.now_ms, zone));
      setText(
        row.cells_.behind,
        lane.newest_ms === null || moment.newest_ms === null ? "–" : age((moment.newest_ms - lane.newest_ms) / 1000),
      );
      setText(
        row.cells_.heard,
        lane.heard_ms === null || lane.heard_ms === undefined
          ? "–"
          : `${age((moment.now_ms - lane.heard_ms) / 1000)} ago`,
      );
      setText(row.cells_.held, count(lane.held_events));
      setText(
        row.cells_.late,
        lane.late?.length ? `${count(lane.late.length)}, newest ${age(lastLate(lane) / 1000)} old on arrival` : "0",
      );
      row.button.tabIndex = visible ? 0 : -1;
      row.button.disabled = lane.excused || Boolean(moment.past);
      setText(row.button, lane.excused ? "excused" : "Excuse…");
    },
  );
}

function lastLate(lane) {
  const [arrived_ms, time_ms] = lane.late[lane.late.length - 1];
  return arrived_ms - time_ms;
}

function makeRow(lane, openAct) {
  const row = make("tr"),
    head = make("th");
  head.scope = "row";
  head.append(nameElement(lane.source));
  row.append(head);
  row.cells_ = {};
  for (const name of COLUMNS) {
    row.cells_[name] = make("td");
    row.append(row.cells_[name]);
  }
  row.button = make("button");
  row.button.type = "button";
  row.button.addEventListener("click", () => openAct("excuse", lane.source));
  const cell = make("td");
  cell.append(row.button);
  row.append(cell);
  return row;
}
