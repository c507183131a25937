// Tables in Markdown that can be read on a terminal too.

/** @param {string[]} head @param {string[][]} rows */
export function table(head, rows) {
  const widths = head.map((title, i) => Math.max(title.length, 3, ...rows.map((row) => (row[i] ?? "").length)));
  const line = (/** @type {string[]} */ cells) =>
    `| ${widths.map((width, i) => (i === 0 ? (cells[i] ?? "").padEnd(width) : (cells[i] ?? "").padStart(width))).join(" | ")} |`;
  const rule = `| ${widths.map((width, i) => (i === 0 ? "-".repeat(width) : `${"-".repeat(width - 1)}:`)).join(" | ")} |`;
  return [line(head), rule, ...rows.map(line)].join("\n");
}

/** Three figures, in the unit that suits. @param {number} milliseconds */
export function duration(milliseconds) {
  if (milliseconds >= 1000) return `${figures(milliseconds / 1000)} s`;
  if (milliseconds >= 1) return `${figures(milliseconds)} ms`;
  return `${figures(1000 * milliseconds)} µs`;
}

/** @param {number} value */
export function times(value) {
  return `${figures(value)} ×`;
}

/** Three figures. @param {number} value */
export function figures(value) {
  if (!Number.isFinite(value)) return String(value);
  const digits = Math.max(0, 2 - Math.floor(Math.log10(Math.abs(value) || 1)));
  return value.toFixed(Math.min(digits, 6));
}
