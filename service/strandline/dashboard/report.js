// The incident report of the time that is looked at: its address, and fetching it where the service asks for a token.

import { Problem } from "./api.js";
import { announce } from "./acts.js";

const SPAN_AT_MOST_MS = 31 * 86400e3; // the service writes none of a longer time

/** The address of the report of a feed from one instant to another. */
export function reportAddress(feed, from_ms, to_ms) {
  const from = Math.max(0, from_ms, to_ms - SPAN_AT_MOST_MS);
  const query = new URLSearchParams({
    from: new Date(from).toISOString(),
    to: new Date(to_ms).toISOString(),
    format: "html",
  });
  return `v1/feeds/${encodeURIComponent(feed)}/report?${query}`;
}

/** Follow the link as it is; with a token, which a link cannot carry, fetch the report and save it as a file. */
export async function followReport(event, api, feed) {
  if (!api.hasToken()) return;
  event.preventDefault();
  const address = event.currentTarget.href;
  try {
    const content = await (await api.fetch(address)).blob();
    const link = document.createElement("a");
    link.href = URL.createObjectURL(content);
    const name = feed.replace(/[^\w.-]+/g, "-").slice(0, 80);
    const to = new URL(address).searchParams.get("to").replace(/[:.]/g, "-");
    link.download = `report-${name}-${to}.html`;
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 10000);
    announce(["The report of ", { name: feed }, " is saved as a file."]);
  } catch (error) {
    if (!(error instanceof Problem)) throw error;
    announce([`There is no report: ${error.title}. ${error.detail ?? ""}`]);
  }
}
