// What a person can do from the page: each act with a dialog that says what will happen and asks who and why.

import { byId, make, setSentence } from "./dom.js";
import { Problem } from "./api.js";

const WHO_KEY = "strandline-who";

/** Each act: its title, what will happen (a sentence), the word on its button, where it goes and what it sends. */
const ACTS = {
  excuse: {
    title: (subject) => ["Excuse ", { name: subject }],
    means: (subject) => [
      "The feed stops waiting for ",
      { name: subject },
      " until it speaks again. The watermark may then move on at once. ",
      "What the source still sends behind the watermark goes to the late lane; nothing is lost.",
    ],
    word: "Excuse it",
    done: (subject) => ["Excused ", { name: subject }, "."],
    path: () => "excuse",
    body: (subject) => ({ source: subject }),
  },
  drain: {
    title: (subject) => ["Drain ", { name: subject }],
    means: () => [
      "All that is held now is released at once, in order. ",
      "Stragglers that come after it are late: they go to the late lane.",
    ],
    word: "Drain now",
    done: (subject) => ["Drained ", { name: subject }, "."],
    path: () => "drain",
    body: () => ({}),
  },
  slack: {
    title: (subject) => ["Set the slack of ", { name: subject }],
    means: () => [
      "For the time you name, the watermark stays this far behind. After it, the configured slack is in force again. ",
      "A shorter slack makes more events late; a longer one delays the output.",
    ],
    word: "Set the slack",
    done: (subject) => ["Set the slack of ", { name: subject }, "."],
    path: () => "slack",
    body: () => ({ slack: tidy("act-slack-value"), for: tidy("act-slack-for") }),
  },
  slack_end: {
    title: (subject) => ["End the slack that was set for ", { name: subject }],
    means: () => ["The configured slack is in force again at once."],
    word: "End it",
    done: (subject) => ["The configured slack of ", { name: subject }, " is in force again."],
    path: () => "slack",
    body: () => ({ slack: null }),
  },
  pause: {
    title: (subject) => ["Pause sink ", { name: subject }],
    means: (subject) => [
      "Nothing more is sent to ",
      { name: subject },
      " until you resume it. What is released waits in the journal; ",
      "when the journal is full, new events are refused.",
    ],
    word: "Pause it",
    done: (subject) => ["Paused ", { name: subject }, "."],
    path: (subject) => `sinks/${encodeURIComponent(subject)}/pause`,
    body: () => ({}),
  },
  resume: {
    title: (subject) => ["Resume sink ", { name: subject }],
    means: (subject) => ["What waits is sent to ", { name: subject }, " again, in order, from where it stopped."],
    word: "Resume it",
    done: (subject) => ["Resumed ", { name: subject }, "."],
    path: (subject) => `sinks/${encodeURIComponent(subject)}/resume`,
    body: () => ({}),
  },
};

function tidy(id) {
  return byId(id).value.replace(/\s+/g, "");
}

/** The words on a button that opens an act's dialog. */
function offerWords(act, subject) {
  const words = {
    excuse: "Excuse ",
    drain: "Drain ",
    slack: "Set the slack of ",
    pause: "Pause ",
    resume: "Resume ",
  }[act];
  return [words, { name: subject }, "…"];
}

/** A button that opens the dialog of an act. */
export function offerButton(act, subject, open) {
  const button = make("button");
  button.type = "button";
  setSentence(button, offerWords(act, subject));
  button.addEventListener("click", () => open(act, subject));
  return button;
}

/** The one dialog for all acts. */
export class Acts {
  #now = null;

  /** `slackWords(slack_s)`: what a slack would give. */
  constructor(api, currentFeed, slackWords) {
    this.api = api;
    this.slackWords = slackWords;
    this.currentFeed = currentFeed;
    byId("act-form").addEventListener("submit", (event) => {
      event.preventDefault();
      this.#carryOut();
    });
    byId("act-cancel").addEventListener("click", () => byId("act").close());
    byId("act-slack-value").addEventListener("input", () => this.#foresee());
  }

  /** Ask for confirmation. `given`: { slack } as a first value. */
  open(act, subject, given = {}) {
    const what = ACTS[act];
    this.#now = { act, subject, feed: this.currentFeed() };
    setSentence(byId("act-title"), what.title(subject));
    setSentence(byId("act-means"), what.means(subject));
    byId("act-do").textContent = what.word;
    byId("act-do").disabled = false;
    byId("act-problem").hidden = true;
    byId("act-reason").value = "";
    byId("act-who").value = stored(WHO_KEY);
    const slack = act === "slack";
    byId("act-slack").hidden = !slack;
    for (const id of ["act-slack-value", "act-slack-for"]) {
      byId(id).disabled = !slack; // what is not asked for must not be checked either
      byId(id).required = slack;
    }
    if (slack) {
      byId("act-slack-value").value = given.slack ?? "";
      byId("act-slack-for").value = "30m";
      this.#foresee();
    }
    byId("act").showModal();
    byId(slack ? "act-slack-value" : byId("act-who").value ? "act-reason" : "act-who").focus();
  }

  /** What the slack that is being typed would give. */
  #foresee() {
    const [, number, unit] = /^([0-9.]+)(ms|s|m|h)$/.exec(tidy("act-slack-value")) ?? [];
    const slack_s = Number(number) * { ms: 0.001, s: 1, m: 60, h: 3600 }[unit];
    byId("act-slack-says").textContent = slack_s > 0 ? this.slackWords(slack_s) : "";
  }

  async #carryOut() {
    const { act, subject, feed } = this.#now,
      what = ACTS[act],
      button = byId("act-do");
    const who = byId("act-who").value.trim(),
      reason = byId("act-reason").value.trim();
    if (!who || !reason) {
      this.#refused(
        new Problem(0, "Who and why are needed.", "They are kept with the act, for whoever reads this later."),
      );
      return;
    }
    button.disabled = true;
    byId("act-problem").hidden = true;
    try {
      localStorage.setItem(WHO_KEY, who);
    } catch {
      // storage may be forbidden; the name is then asked for again
    }
    try {
      await this.api.post(`/v1/feeds/${encodeURIComponent(feed)}/${what.path(subject)}`, {
        ...what.body(subject),
        reason,
        who,
      });
      byId("act").close();
      announce(what.done(subject));
    } catch (error) {
      this.#refused(error instanceof Problem ? error : new Problem(0, "It did not work", String(error)));
    }
    button.disabled = false;
  }

  #refused(problem) {
    byId("act-problem-title").textContent = problem.title.replace(/[.]?$/, ".");
    byId("act-problem-detail").textContent = problem.detail ?? "";
    byId("act-problem").hidden = false;
  }
}

function stored(key) {
  try {
    return localStorage.getItem(key) ?? "";
  } catch {
    return "";
  }
}

let hushing = 0;

/** Say that something was done; it goes away by itself. */
export function announce(says) {
  const place = byId("done");
  setSentence(place, says);
  place.classList.add("shown");
  clearTimeout(hushing);
  hushing = setTimeout(() => place.classList.remove("shown"), 6000);
}

/** Ask for a token; resolves once one is given. */
export function askToken(why) {
  byId("token-why").textContent = why;
  byId("token-value").value = "";
  const dialog = byId("token");
  if (!dialog.open) dialog.showModal();
  dialog.oncancel = (event) => event.preventDefault(); // one handler, however often it is asked
  return new Promise((resolve) => {
    byId("token-form").addEventListener(
      "submit",
      (event) => {
        event.preventDefault();
        dialog.close();
        resolve(byId("token-value").value.trim());
      },
      { once: true },
    );
  });
}
