// Small helpers for elements: making them, setting only what changed, names isolated. Texts go in as textContent only.

import { clean, shown } from "./format.js";

const NAME_AT_MOST = 40; // graphemes

/** The element with this id. */
export function byId(id) {
  return document.getElementById(id);
}

/** A new element with a class and a text. */
export function make(tag, name = "", text = "") {
  const element = document.createElement(tag);
  if (name) element.className = name;
  if (text) element.textContent = text;
  return element;
}

/** Set a text only where it differs: what did not change costs no layout. */
export function setText(element, text) {
  if (element.textContent !== text) element.textContent = text;
}

/** Set an attribute only where it differs; null removes it. */
export function setAttribute(element, name, value) {
  if (value === null) {
    if (element.hasAttribute(name)) element.removeAttribute(name);
  } else if (element.getAttribute(name) !== value) element.setAttribute(name, value);
}

/** A name from outside, isolated from the text around it; cut, with the whole of it as its title. */
export function nameElement(name) {
  const element = make("bdi", "name", shown(name, NAME_AT_MOST));
  const whole = clean(name);
  if (element.textContent !== whole) element.title = whole.slice(0, 1024);
  return element;
}

/** Show a sentence (texts, { name } and { name, href }) in an element; only where it differs from what stands there. */
export function setSentence(element, says) {
  const key = JSON.stringify(says);
  if (element.saidNow === key) return;
  element.saidNow = key;
  element.replaceChildren(
    ...says.map((part) =>
      typeof part === "string" ? part : part.href ? linkElement(part) : nameElement(part.name),
    ),
  );
}

function linkElement({ name, href }) {
  const element = make("a");
  element.href = href;
  element.append(nameElement(name));
  return element;
}

/** Children kept by key: makes what is new, updates all, removes the rest, in order. */
export function keyed(parent, items, keyOf, create, update) {
  const known = (parent.keyedNow ??= new Map());
  const wanted = new Set();
  let at = parent.firstElementChild;
  for (const item of items) {
    const key = keyOf(item);
    if (wanted.has(key)) continue;
    wanted.add(key);
    let element = known.get(key);
    if (!element) {
      element = create(item);
      known.set(key, element);
    }
    update(element, item);
    if (element !== at) parent.insertBefore(element, at);
    else at = at.nextElementSibling;
  }
  for (const [key, element] of known) {
    if (wanted.has(key)) continue;
    element.remove();
    known.delete(key);
  }
}
