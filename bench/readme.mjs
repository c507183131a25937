// The tables that a user asks for, of a run, into README.md between its two markers.
import { readFileSync, writeFileSync } from "node:fs";
import { table } from "./table.mjs";

const begin = "<!-- npm run bench -- --readme writes from here -->";
const end = "<!-- to here -->";
const shown = ["joint", "growth", "chain", "command", "memory"];
const path = new URL("../README.md", import.meta.url);

/** @param {{ machine: ReturnType<typeof import("./machine.mjs").machine> & { time: string }, suites: Record<string, any> }} results */
export function writeReadme({ machine, suites }) {
  const text = readFileSync(path, "utf8");
  const [from, to] = [text.indexOf(begin), text.indexOf(end)];
  if (from < 0 || to < from) throw new Error(`README.md: no lines '${begin}' and '${end}' to write between.`);
  const { processor, nProcessor, architecture, node, date, version, time } = machine;
  const on = `Printed on ${date} for version ${version}: ${processor}, ${nProcessor} processors, ${architecture}, Node ${node.slice(1)}; medians of the ${time}'s time.`;
  const asked = shown.flatMap((name) => suites[name] ?? []);
  const parts = asked.flatMap(({ title, head, rows, notes, turned }) => [
    `${title[0].toUpperCase()}${title.slice(1)}:`,
    turned === false ? table(head, rows) : sideways(head, rows),
    ...(notes ?? []),
  ]);
  writeFileSync(path, `${text.slice(0, from)}${begin}\n\n${[on, ...parts].join("\n\n")}\n\n${text.slice(to)}`);
  console.log("README.md: tables written.");
}

/** Rows for columns, so that a page is wide enough; columns without any number are left out. */
function sideways(head, rows) {
  const lines = head.slice(1).map((name, i) => [name, ...rows.map((row) => row[i + 1])]);
  return table(
    [head[0], ...rows.map(([name]) => name)],
    lines.filter((line) => line.slice(1).some((cell) => cell !== "–")),
  );
}
