// Has a kernel lost half of its speed? Asked of every change, without a clock to trust: each kernel runs in turns with a
// JavaScript rival that does the same work in the same process, and the quickest run of each is taken, since whatever disturbs
// a run only makes it slower. The ratio of the two is compared with the one noted in guard.json: below half of it,
// twice in a row, is a loss. Answers are compared first.
//
//     node bench/guard.mjs          fails when a kernel is half as fast against its rival as was noted
//     node bench/guard.mjs --note   notes what is found now; commit guard.json and say why
import { readFileSync, writeFileSync } from "node:fs";
import { requireAgreement } from "./agreement.mjs";
import { bandedRivals } from "./banded.bench.mjs";
import { makeFrame } from "./frame.mjs";
import { openExtraction, withShape } from "./kernel.mjs";
import { JointLoop } from "./loop/joint.mjs";
import { pixelRivals } from "./pixels.bench.mjs";

const noted = new URL("./guard.json", import.meta.url);
const size = { nFibre: 100, nx: 256, ny: 528 };
const nWarm = 15;
const nRound = 40;
const leastShare = 0.5;

const rivals = openRivals();
for (const pair of Object.values(rivals)) speedUp(pair, nWarm); // until the engine has made the best of both
const found = Object.fromEntries(Object.entries(rivals).map(([name, pair]) => [name, speedUp(pair, nRound)]));
if (process.argv.includes("--note")) {
  const rounded = Object.fromEntries(
    Object.entries(found).map(([name, value]) => [name, Number(value.toPrecision(2))]),
  );
  writeFileSync(noted, `${JSON.stringify(rounded, null, 2)}\n`);
  console.log(`Noted: ${JSON.stringify(rounded)}`);
} else compare(JSON.parse(readFileSync(noted, "utf8")));

/** @param {Record<string, number>} expected */
function compare(expected) {
  for (const [name, before] of Object.entries(expected)) {
    if (rivals[name] === undefined)
      throw new Error(`guard.json names ${name}, which the guard does not know; note anew.`);
    const least = leastShare * before;
    const now = found[name] > least ? found[name] : Math.max(found[name], speedUp(rivals[name], 2 * nRound));
    console.log(`${name}: ${now.toFixed(1)} times as fast as its rival, ${before} when noted`);
    if (now > least) continue;
    console.error(
      `${name}: ${now.toFixed(1)} times as fast as its rival in JavaScript, but ${before} were noted; find what slowed it ` +
        "(npm run bench), or note the new ratio with node bench/guard.mjs --note and say why.",
    );
    process.exitCode = 1;
  }
}

/** @param {{ kernel: () => number, rival: () => number }} pair @param {number} rounds */
function speedUp({ kernel, rival }, rounds) {
  const least = { kernel: Number.POSITIVE_INFINITY, rival: Number.POSITIVE_INFINITY };
  for (let round = 0; round < rounds; round++) {
    least.kernel = Math.min(least.kernel, milliseconds(kernel));
    least.rival = Math.min(least.rival, milliseconds(rival));
  }
  return least.rival / least.kernel;
}

function milliseconds(run) {
  const began = performance.now();
  if (Number.isNaN(run())) throw new Error("A run gave no number.");
  return performance.now() - began;
}

/** @returns {Record<string, { kernel: () => number, rival: () => number }>} */
function openRivals() {
  const input = makeFrame(size);
  const loop = new JointLoop(input);
  const rival = () => {
    loop.rejected.fill(0);
    loop.run();
    return loop.output.variance[input.nx + 1];
  };
  rival();
  const extraction = (/** @type {string} */ name, kernel) => {
    kernel.run();
    requireAgreement(name, kernel, loop);
    return { kernel: kernel.run, rival };
  };
  const many = (/** @type {() => number} */ run) => () => {
    let sum = 0;
    for (let i = 0; i < 50; i++) sum += run();
    return sum;
  };
  const banded = bandedRivals(400);
  const pixels = pixelRivals(512, 512);
  return {
    "joint, f32": extraction("joint, f32", openExtraction(input, "f32")),
    "joint, f64": extraction("joint, f64", openExtraction(input, "f64")),
    "joint, f32, table": extraction("joint, f32, table", openExtraction(withShape(input), "f32")),
    "banded, f32": { kernel: many(banded.f32), rival: many(banded.loop) },
    "pixels, 16 bits": { kernel: pixels.kernel, rival: pixels.loop },
  };
}
