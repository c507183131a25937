// npm run bench: every suite at three sizes; tables on the terminal, all numbers in build/bench.json.
//
//     node bench/run.mjs [SUITE …] [--readme] [--huge] [--small] [--cpu] [--json FILE]
//
// SUITE: names of the files here, NAME.bench.mjs (default: all). --readme puts the tables into README.md; --huge adds
// 2000 fibres × 10240 columns to the growth; --small leaves out the largest size; --cpu counts processor
// time, for a busy machine (whole commands excepted). Answers are compared before anything
// is timed, and no table compares different work: each suite says what was done.
import { readdirSync, writeFileSync } from "node:fs";
import { fileURLToPath } from "node:url";
import { parseArgs } from "node:util";
import { machine } from "./machine.mjs";
import { writeReadme } from "./readme.mjs";
import { table } from "./table.mjs";
import { countProcessorTime, sink, whichTime } from "./timing.mjs";

const order = [
  "joint",
  "methods",
  "growth",
  "chain",
  "command",
  "memory",
  "profile",
  "banded",
  "centring",
  "pixels",
  "checksum",
  "correct",
];

const { values: flags, positionals } = parseArgs({
  allowPositionals: true,
  options: {
    readme: { type: "boolean", default: false },
    huge: { type: "boolean", default: false },
    small: { type: "boolean", default: false },
    cpu: { type: "boolean", default: false },
    json: { type: "string", default: fileURLToPath(new URL("../build/bench.json", import.meta.url)) },
  },
});

const known = readdirSync(new URL(".", import.meta.url)).flatMap((file) => /^(\w+)\.bench\.mjs$/.exec(file)?.[1] ?? []);
const unknown = positionals.find((name) => !known.includes(name));
if (unknown !== undefined) {
  console.error(`No suite is called ${unknown}; there are ${known.join(", ")}.`);
  process.exit(2);
}
const asked = [...known]
  .sort((a, b) => order.indexOf(a) - order.indexOf(b))
  .filter((name) => positionals.length === 0 || positionals.includes(name));

if (flags.cpu) countProcessorTime();
const on = { ...machine(), time: whichTime() };
console.log(
  `hatchel ${on.version}, ${on.date}; ${on.processor} (${on.nProcessor}, ${on.architecture}), Node ${on.node}; the ${on.time}'s time\n`,
);
const results = { machine: on, suites: {} };
for (const name of asked) {
  const suite = await import(`./${name}.bench.mjs`);
  console.log(`## ${name}: ${suite.title}\n`);
  const result = await suite.run(flags);
  console.log(`${table(result.head, result.rows)}\n`);
  for (const note of result.notes ?? []) console.log(`${note}\n`);
  results.suites[name] = { title: suite.title, ...result };
}
writeFileSync(flags.json, `${JSON.stringify(results, null, 1)}\n`);
console.log(`All numbers: ${flags.json}`);
if (flags.readme) writeReadme(results);
if (Number.isNaN(sink.sum)) process.exitCode = 1;
