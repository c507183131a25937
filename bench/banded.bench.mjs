// Four symmetric systems of half-bandwidth 2, factored, solved and inverted (band): the kernel as an extraction calls it, in a
// memory that is kept (one call of four f32 lanes, or two of two f64 lanes); the unrolled loop; the reference. Each works on
// fresh copies of the systems, laid out as it likes them.
import { factorBand, inverseBand, solveBand } from "../dist/reference/banded.js";
import { seeded } from "./frame.mjs";
import { kernels } from "./kernel.mjs";
import { factor, invert, solve } from "./loop/banded.mjs";
import { duration, times } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

export const title = "four banded systems of half-bandwidth 2 factored, solved and inverted";

const bandwidth = 2;
const nSystem = 4;

export async function run() {
  const cases = [100, 400, 1600].map(measure);
  const names = ["f32", "f64", "loop", "reference"];
  return {
    head: ["fibres", "kernel f32", "kernel f64", "JS loop", "reference", "loop ÷ f32", "reference ÷ f32"],
    rows: cases.map(({ n, timings }) => [
      String(n),
      ...names.map((name) => duration(timings[name].median)),
      times(ratio(timings.loop, timings.f32)),
      times(ratio(timings.reference, timings.f32)),
    ]),
    cases,
  };
}

function measure(n) {
  return { n, timings: timeInTurns(bandedRivals(n), { milliseconds: 30 }) };
}

/** Who solves systems of `n` unknowns, once their answers agree. */
export function bandedRivals(n) {
  const systems = makeSystems(n);
  const others = { f32: openKernel(systems, n, "f32"), f64: openKernel(systems, n, "f64"), loop: openLoop(systems, n) };
  const reference = () => systems.map((system) => byReference(system, n));
  const bounds = { f64: 1e-12, loop: 1e-12, f32: 1e-5 };
  const expected = reference();
  for (const [name, solveAll] of Object.entries(others)) {
    const found = solveAll();
    expected.forEach(({ x, inverse }, s) => {
      for (let k = 0; k < n; k++) {
        const far = Math.max(
          Math.abs(found.x(s, k) - x[k]),
          Math.abs(found.variance(s, k) - inverse[k * (bandwidth + 1)]),
        );
        if (!(far < bounds[name])) throw new Error(`banded: ${name} differs in unknown ${k} of system ${s}.`);
      }
    });
  }
  const answer = (/** @type {"f32" | "f64" | "loop"} */ name) => () => others[name]().x(3, n >> 1);
  return { f32: answer("f32"), f64: answer("f64"), loop: answer("loop"), reference: () => reference()[3].x[n >> 1] };
}

/** Diagonally dominant, every number different. */
function makeSystems(n) {
  const next = seeded(n);
  return Array.from({ length: nSystem }, () => {
    const band = Float64Array.from({ length: n * (bandwidth + 1) }, () => next() - 0.5);
    for (let i = 0; i < n; i++) band[i * (bandwidth + 1)] = 2 + next();
    return { band, rhs: Float64Array.from({ length: n }, () => next()) };
  });
}

/** Systems side by side in the lanes. @param {"f32" | "f64"} precision */
function openKernel(systems, n, precision) {
  const nLane = precision === "f32" ? 4 : 2;
  const bench = kernels.workbench(8 * nSystem * n * (2 * bandwidth + 3));
  const numbers = (length) => (precision === "f32" ? bench.float32(length) : bench.float64(length));
  const call = precision === "f32" ? bench.call.bandedSystems32 : bench.call.bandedSystems64;
  const row = bandwidth + 1;
  const groups = Array.from({ length: nSystem / nLane }, (_, g) => {
    const lane = (i) => systems[g * nLane + (i % nLane)];
    const band = Float64Array.from({ length: n * row * nLane }, (_, i) => lane(i).band[Math.floor(i / nLane)]);
    const rhs = Float64Array.from({ length: n * nLane }, (_, i) => lane(i).rhs[Math.floor(i / nLane)]);
    const typed = precision === "f32" ? (array) => Float32Array.from(array) : (array) => array;
    const views = { band: numbers(band.length), rhs: numbers(rhs.length), inverse: numbers(band.length) };
    return { ...views, fresh: { band: typed(band), rhs: typed(rhs) } };
  });
  const found = {
    x: (s, k) => groups[Math.floor(s / nLane)].rhs[k * nLane + (s % nLane)],
    variance: (s, k) => groups[Math.floor(s / nLane)].inverse[k * row * nLane + (s % nLane)],
  };
  return () => {
    for (const { band, rhs, inverse, fresh } of groups) {
      band.set(fresh.band);
      rhs.set(fresh.rhs);
      call(band.byteOffset, n, bandwidth, rhs.byteOffset, inverse.byteOffset);
    }
    return found;
  };
}

/** Diagonals apart, scratch kept. */
function openLoop(systems, n) {
  const diagonal = (j, band) => Float64Array.from({ length: n }, (_, i) => (i < j ? 0 : band[i * (bandwidth + 1) + j]));
  const all = systems.map(({ band, rhs }) => ({
    fresh: [diagonal(0, band), diagonal(1, band), diagonal(2, band), rhs],
    m: [0, 1, 2, 3].map(() => new Float64Array(n)),
    variance: new Float64Array(n),
    below: new Float64Array(n),
  }));
  const found = { x: (s, k) => all[s].m[3][k], variance: (s, k) => all[s].variance[k] };
  return () => {
    for (const { fresh, m, variance, below } of all) {
      for (let j = 0; j < 4; j++) m[j].set(fresh[j]);
      factor(m[0], m[1], m[2], n);
      solve(m[0], m[1], m[2], n, m[3]);
      invert(m[0], m[1], m[2], n, variance, below);
    }
    return found;
  };
}

function byReference({ band, rhs }, n) {
  const [factors, x] = [band.slice(), rhs.slice()];
  factorBand(factors, n, bandwidth);
  const inverse = inverseBand(factors, n, bandwidth);
  solveBand(factors, n, bandwidth, x);
  return { x, inverse };
}
