// How the kernel's time for one fibre in one column grows: with fibres, with columns, with the window, and with frame and
// fibres together. Flat is good; joint, f32, one thread, work as in joint.bench.mjs.
import { hugeSize, makeFrame } from "./frame.mjs";
import { openExtraction } from "./kernel.mjs";
import { figures } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

/** @typedef {{ nFibre: number, nx: number, ny: number, halfWindow?: number }} Size */

export const title = "growth of the kernel's time for a fibre in a column, joint, f32, one thread";

/** @param {{ small?: boolean, huge?: boolean }} flags */
export async function run({ small, huge }) {
  const frame = [
    { nFibre: 400, nx: 2048, ny: 2056 },
    ...(small ? [] : [{ nFibre: 800, nx: 4096, ny: 4112 }]),
    ...(huge ? [hugeSize] : []),
  ];
  const groups = /** @type {[string, Size[]][]} */ ([
    ["fibres", [100, 200, 400, 800].map((nFibre) => ({ nFibre, nx: 256, ny: 5 * nFibre + 28 }))],
    ["columns", [256, 512, 1024, 2048].map((nx) => ({ nFibre: 200, nx, ny: 1028 }))],
    ["window", [4, 5, 6].map((halfWindow) => ({ nFibre: 200, nx: 256, ny: 1028, halfWindow }))],
    ["frame", frame],
  ]);
  const cases = groups.flatMap(measure);
  return {
    turned: false,
    head: ["with", "fibres", "columns × rows", "window", "ns a fibre and column", "÷ first of its kind"],
    rows: cases.map(({ what, size, nanoseconds, growth }) => [
      what,
      String(size.nFibre),
      `${size.nx} × ${size.ny}`,
      `± ${size.halfWindow ?? 6} px`,
      figures(nanoseconds),
      figures(growth),
    ]),
    cases,
  };
}

/** Those of one kind take turns. @param {[string, Size[]]} group */
function measure([what, sizes]) {
  const tasks = Object.fromEntries(
    sizes.map((size, i) => {
      const input = makeFrame(size);
      return [i, openExtraction({ ...input, halfWindow: size.halfWindow ?? input.halfWindow }, "f32").run];
    }),
  );
  const timings = timeInTurns(tasks, { rounds: what === "frame" ? 3 : 7 });
  const points = (/** @type {Size} */ { nFibre, nx }) => nFibre * nx;
  return sizes.map((size, i) => ({
    what,
    size,
    nanoseconds: (1e6 * timings[i].median) / points(size),
    growth: (ratio(timings[i], timings[0]) * points(sizes[0])) / points(size),
    timing: timings[i],
  }));
}
