// A cluster in words: which partition runs where, what state it is in, and where another instance is reached.
// Pure: the document of GET /v1/cluster in, words out. How it stands as a whole is said by the service itself.

import { age, count, counted } from "./format.js";

const FAR_BEHIND_MESSAGES = 1000, // as the service has it, in cluster/words.py
  QUIET_SHARE = 0.6; // of the lease
const ADDRESS = /^(\[[0-9a-fA-F:.]+\]|[A-Za-z0-9_.-]+):([0-9]{1,5})$/,
  ANYWHERE = ["0.0.0.0", "[::]"],
  LOOPBACK = /^(localhost|127\.[0-9.]+|\[::1\])$/;

/** The names of the partitions that are at work at the instance that was asked. */
export function runningHere(cluster) {
  return cluster.partitions.filter((row) => row.here && row.state === "owned").map((row) => row.runtime);
}

/** The partition of this name; null where the feed is none. */
export function partitionOf(cluster, name) {
  return cluster.partitions.find((row) => row.runtime === name) ?? null;
}

/** Is it so far behind that somebody should know? */
export function isFarBehind(row) {
  return row.behind_messages !== null && row.behind_messages >= FAR_BEHIND_MESSAGES;
}

/** Partitions, those first that need eyes: nobody's, changing hands or hindered, far behind; else as configured. */
export function eyesFirst(rows) {
  return rows
    .map((row, index) => [rankOf(row), index, row])
    .sort(([one, oneAt], [other, otherAt]) => one[0] - other[0] || one[1] - other[1] || oneAt - otherAt)
    .map(([, , row]) => row);
}

function rankOf(row) {
  if (row.state === "nobody's") return [0, 0];
  if (row.state !== "owned" || row.words) return [1, 0];
  return isFarBehind(row) ? [2, -row.behind_messages] : [3, 0];
}

/** The state of a partition for the style sheet, and in a shape and words. `known`: is what others say of now? */
export function stateOf(row, known = true) {
  if (!known && !row.here) return ["unknown", "? not known"];
  if (row.state === "nobody's")
    return ["nobodys", `✕ nobody's${row.nobodys_s >= 1 ? ` for ${age(row.nobodys_s)}` : ""}`];
  if (row.state !== "owned") return ["moving", `◐ ${row.state}`];
  if (row.words) return ["behind", "▲ hindered"];
  return isFarBehind(row) ? ["behind", "▲ far behind"] : ["owned", "● owned"];
}

/** Instances for the strip, those first that are gone or quiet: { name, state, words, owns, listen }. */
export function instancesOf(cluster) {
  const gone = cluster.gone.map((one) => ({
    name: one.instance,
    state: one.stopped ? "stopped" : "gone",
    words: `${one.stopped ? "□ stopped" : "✕ gone, last seen"} ${age(one.seen_s)} ago`,
    owns: `had ${counted(one.owned, "partition")}`,
    listen: null, // nothing answers there
  }));
  const there = cluster.instances.map((one) => {
    const me = one.instance === cluster.instance,
      away = me && cluster.away_s !== null,
      quiet = !me && one.seen_s > QUIET_SHARE * cluster.lease_s;
    return {
      name: one.instance,
      state: quiet || away ? "quiet" : "there",
      words: me
        ? away
          ? "▲ this one, cut off"
          : "● this one"
        : `${quiet ? "▲ last" : "●"} seen ${age(one.seen_s)} ago`,
      owns: `owns ${counted(one.owns, "partition")}`,
      listen: me ? null : one.listen,
    };
  });
  return [...gone, ...there.filter((one) => one.state === "quiet"), ...there.filter((one) => one.state !== "quiet")];
}

/** In a few words, for the head of the view: [level, words]. */
export function verdictOf(cluster) {
  const rows = cluster.partitions,
    nobodys = rows.filter((row) => row.state === "nobody's").length,
    moving = rows.filter((row) => row.state !== "owned").length - nobodys,
    hindered = rows.filter((row) => row.words).length,
    behind = rows.filter((row) => row.state === "owned" && isFarBehind(row)).length,
    gone = cluster.gone.filter((one) => !one.stopped);
  if (cluster.away_s !== null || !cluster.connected)
    return [cluster.level, `▲ ${cluster.instance} is not in it; what stands here is old`];
  const found = [
    nobodys ? `✕ ${count(nobodys)} of ${count(rows.length)} nobody's` : "",
    hindered ? `▲ ${count(hindered)} hindered` : "",
    behind ? `▲ ${count(behind)} far behind` : "",
    moving ? `◐ ${count(moving)} changing hands` : "",
    gone.length ? `✕ ${counted(gone.length, "instance")} gone` : "",
  ].filter(Boolean);
  const shares = `${counted(rows.length, "partition")} owned, by ${counted(cluster.instances.length, "instance")}`;
  if (!found.length) return [cluster.level, `${cluster.level === "fine" ? "✓" : "▲"} ${shares}`];
  return [cluster.level === "fine" ? "watch" : cluster.level, found.join(", ")];
}

/** The dashboard of an instance that listens there, for a page loaded from `page` (a location); null if not known. */
export function addressOf(listen, page, feed) {
  const [, host, port] = ADDRESS.exec(listen ?? "") ?? [];
  if (!host || ANYWHERE.includes(host) || Number(port) === 0) return null;
  if (LOOPBACK.test(host) && !LOOPBACK.test(page.hostname)) return null; // another machine's own
  return `${page.protocol}//${host}:${port}/${feed ? `?feed=${encodeURIComponent(feed)}` : ""}`;
}

/** Where an instance listens, as it says itself; null where it does not, or is not there. */
export function listenOf(cluster, instance) {
  return cluster.instances.find((one) => one.instance === instance)?.listen ?? null;
}

/** How the cluster stands as a trouble for the sentence on top; nothing where all is well. */
export function clusterTrouble(cluster) {
  if (cluster === null || cluster.level === "fine") return [];
  return [
    {
      first: true,
      level: cluster.level,
      place: "cluster",
      says: [`${cluster.says} `],
      next: [cluster.next],
      about: ["cluster", cluster.says.replace(/[0-9.,]+ ?(s|min|h)?/g, "")],
    },
  ];
}

/** What is said in the place of a feed's state where the feed is not at work here: { level, says, next, key }. */
export function elsewhereWords(cluster, name, page, last) {
  const row = partitionOf(cluster, name),
    seen = last ? `What stands below is from ${last}. ` : "",
    more = cluster.level === "fine" ? [] : [` ${cluster.says}`];
  if (row === null)
    return {
      level: cluster.level === "fine" ? "watch" : cluster.level,
      says: [`No partition is at work at ${cluster.instance} now.`, ...more],
      next: [
        cluster.level === "fine" ? "It stands by. Other instances have pages of their own: see below." : cluster.next,
      ],
      key: "none",
    };
  const moves = row.owner !== null && row.state !== "owned";
  if (row.here || row.owner === null)
    return {
      level: cluster.level === "bad" ? "bad" : "watch",
      says: [
        { name },
        row.here
          ? ` is ${row.state === "owned" ? "starting" : row.state} here. `
          : cluster.away_s === null
            ? " is nobody's now. "
            : " was stopped here. ",
        seen,
        ...more,
      ],
      next: [row.here ? "Wait a moment: this page follows by itself." : cluster.next],
      key: row.here ? "here" : "nobodys",
    };
  const href = addressOf(listenOf(cluster, row.owner), page, name);
  return {
    level: cluster.level === "bad" ? "bad" : "watch",
    says: [
      { name },
      last ? " has moved to " : " is at ",
      { name: row.owner },
      `${moves ? `, which is ${row.state} it` : ""}. `,
      seen,
      ...more,
    ],
    next: href
      ? ["Follow it there: ", { name: `${name} at ${row.owner}`, href }, ". Or choose a feed that runs here."]
      : [`Open the dashboard of ${row.owner}${listensWords(cluster, row.owner)}. Or choose a feed that runs here.`],
    key: `at ${row.owner}`,
  };
}

function listensWords(cluster, instance) {
  const listen = listenOf(cluster, instance);
  return listen ? ` (it listens at ${listen} of its machine)` : "";
}
