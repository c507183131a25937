// Joint centring of all fibres in two columns: light, shift and width of each, over a background of three terms, in three
// rounds with rejection at the last, the first weights from the data. The kernel has the columns in its lanes, copies
// included; the reference does the same two, one after the other.
import { Centring } from "../dist/kernels/centring.js";
import { centreColumn } from "../dist/reference/centring.js";
import { makeFrame } from "./frame.mjs";
import { kernels } from "./kernel.mjs";
import { duration, figures, times } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

export const title =
  "joint centring of all fibres in two columns, light, shift and width, three rounds, copies included";

const shape = { neighbours: 2, reach: 6, nBack: 3 };
/** @type {import("../dist/reference/centring.js").CentringRounds} */
const rounds = { nPar: 3, nRound: 3, near: 6, relativeError: 0.01, kappa: 5, rejectError: 0.05 };

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const cases = (small ? [50, 200] : [50, 200, 800]).map(measure);
  return {
    head: ["fibres", "kernel f64", "µs a fibre, column and round", "reference", "reference ÷ kernel"],
    rows: cases.map(({ n, timings: { kernel, reference } }) => [
      String(n),
      duration(kernel.median),
      figures((1000 * kernel.median) / (2 * rounds.nRound * n)),
      reference ? duration(reference.median) : "–",
      reference ? times(ratio(reference, kernel)) : "–",
    ]),
    cases,
  };
}

function measure(n) {
  const columns = makeColumns(n);
  const centring = new Centring(kernels, { nRow: columns[0].data.length, nFibre: n, nColumn: 2, ...shape });
  const byKernel = () => {
    columns.forEach((column, i) => {
      centring.place(i, column);
      centring.guess(i, column);
    });
    centring.measure(rounds);
    return columns.map((_, i) => centring.result(i).solution);
  };
  const byReference = () =>
    columns.map((column) => {
      const good = Uint8Array.from(column.good);
      return centreColumn(column, good, column, column.data, shape, rounds).solution;
    });
  /** @type {Record<string, () => number>} */
  const tasks = { kernel: () => byKernel()[1][1] };
  if (n <= 50) {
    const expected = byReference();
    byKernel().forEach((found, i) => {
      const far = found.findIndex((value, j) => !(Math.abs(value - expected[i][j]) < 1e-7 * (1 + Math.abs(value))));
      if (far >= 0) throw new Error(`centring: unknown ${far} of column ${i}: ${found[far]} and ${expected[i][far]}.`);
    });
    tasks.reference = () => byReference()[1][1];
  }
  return { n, timings: timeInTurns(tasks, { milliseconds: 50, rounds: 5 }) };
}

/** Two neighbouring columns of a frame, and centres a little off. */
function makeColumns(n) {
  const { electrons, mask, nx, ny, trace, width, nTrace } = makeFrame({ nFibre: n, nx: 16, ny: 5 * n + 28 });
  return [7, 8].map((x) => {
    const t = (2 * x) / (nx - 1) - 1;
    const onRows = (/** @type {(pixel: number) => number} */ value) =>
      Float64Array.from({ length: ny }, (_, y) => value(y * nx + x));
    return {
      data: onRows((pixel) => electrons[pixel]),
      good: onRows((pixel) => (mask[pixel] === 0 ? 1 : 0)),
      fixedVariance: onRows(() => 9),
      variancePerElectron: onRows(() => 1),
      centre: Float64Array.from(
        { length: n },
        (_, k) => trace[k * nTrace] + trace[k * nTrace + 1] * t + 0.03 + 0.001 * x,
      ),
      sigma: Float64Array.from({ length: n }, (_, k) => width[2 * k] * 1.01),
    };
  });
}
