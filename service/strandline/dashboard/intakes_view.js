// The boxes of a feed's intakes, beside the pictures. What they say is in `intakes`.

import { byId, keyed, make, nameElement, setAttribute, setSentence, setText } from "./dom.js";
import { clean } from "./format.js";
import { intakeState, intakeWaits } from "./intakes.js";

/** Bring them up to a moment; there are none where a feed has no intake. */
export function showIntakes(moment, zone) {
  const intakes = moment.intakes ?? [];
  byId("intakes-panel").hidden = !intakes.length;
  keyed(
    byId("intakes"),
    intakes,
    (intake) => intake.name,
    makeIntake,
    (item, intake) => {
      const [state, word] = intakeState(intake, moment, zone),
        paused = intake.paused_until_ms !== null;
      setAttribute(item, "data-state", state);
      setText(item.state, word);
      setText(item.waits, intakeWaits(intake));
      const words = paused ? intake.last_error : intake.connected ? "" : intake.words;
      const last = !words && intake.last_error ? [`last error: ${clean(intake.last_error)}`] : [clean(words ?? "")];
      setSentence(item.error, last);
      item.error.classList.toggle("sink-error", Boolean(words));
    },
  );
}

function makeIntake(intake) {
  const item = make("li", "sink");
  item.state = make("span", "sink-state");
  item.waits = make("span", "sink-waits");
  item.error = make("span", "sink-waits");
  const head = make("div", "sink-head");
  head.append(nameElement(intake.name), make("span", "sink-waits", intake.kind), item.state);
  item.append(head, item.waits, item.error);
  return item;
}
