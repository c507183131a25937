/** Tables and numbers for people. */

/** Columns side by side: the first to the left, the others to the right. The first row is the heading. */
export function textTable(rows: string[][]): string {
  const widths = rows[0].map((_, column) => Math.max(...rows.map((row) => row[column].length)));
  const line = (row: string[]) =>
    row.map((cell, c) => (c === 0 ? cell.padEnd(widths[c]) : cell.padStart(widths[c]))).join("  ");
  return rows.map((row) => `  ${line(row).trimEnd()}`).join("\n");
}

/** "name   value" lines. */
export function textPairs(pairs: [string, string][]): string {
  const width = Math.max(...pairs.map(([name]) => name.length));
  return pairs.map(([name, value]) => `  ${name.padEnd(width)}  ${value}`).join("\n");
}

/** A number to `digits` places, "–" where there is none. */
export function fixed(value: number | null | undefined, digits: number): string {
  return value === null || value === undefined || !Number.isFinite(value) ? "–" : value.toFixed(digits);
}

/** A share as a percentage; small ones keep two significant digits, what rounding left is 0. */
export function percentage(share: number | null | undefined, digits = 1): string {
  if (share === null || share === undefined || !Number.isFinite(share)) return "–";
  const percent = 100 * share;
  if (Math.abs(percent) > 1e-9 && Math.abs(percent) < 10 ** -digits) return `${percent.toPrecision(2)} %`;
  return `${(Math.abs(percent) > 1e-9 ? percent : 0).toFixed(digits)} %`;
}

/** "1 fibre", "168 fibres". */
export function counted(n: number, noun: string): string {
  return `${n} ${noun}${n === 1 ? "" : "s"}`;
}

/** 3, 4, 5, 9 → "3-5, 9". */
export function ranges(numbers: readonly number[]): string {
  const parts: [number, number][] = [];
  for (const n of numbers) {
    const last = parts[parts.length - 1];
    if (last !== undefined && n === last[1] + 1) last[1] = n;
    else parts.push([n, n]);
  }
  return parts.map(([from, to]) => (from === to ? `${from}` : `${from}-${to}`)).join(", ");
}
