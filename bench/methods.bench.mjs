// The other estimators on the same frame, by the same kernel: the fit, rejections and variances are joint's, then each
// method's estimate closes the column (optimal and boxcar with and without giving back cross-talk). Their readable references
// do the same at the smallest size.
import { requireAgreement } from "./agreement.mjs";
import { makeFrame, sizes } from "./frame.mjs";
import { openExtraction } from "./kernel.mjs";
import { openReference } from "./reference.mjs";
import { duration, times } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

export const title = "optimal and boxcar, with and without cross-talk correction, three solves, rejection";

const methods = /** @type {const} */ ([
  ["joint", "joint", false],
  ["optimal", "optimal", false],
  ["optimal, cross-talk", "optimal", true],
  ["boxcar", "boxcar", false],
  ["boxcar, cross-talk", "boxcar", true],
]);

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const names = methods.map(([name]) => name);
  const cases = sizes.slice(0, small ? 1 : 2).map(measure);
  return {
    head: [
      "fibres × columns",
      ...names.map((name) => `${name}, f32`),
      ...names.slice(1).map((name) => `${name} ÷ joint`),
      ...names.map((name) => `${name}: reference ÷ f32`),
    ],
    rows: cases.map(({ size, timings }) => [
      `${size.nFibre} × ${size.nx}`,
      ...names.map((name) => duration(timings[name].median)),
      ...names.slice(1).map((name) => times(ratio(timings[name], timings.joint))),
      ...names.map((name) =>
        timings[`reference ${name}`] ? times(ratio(timings[`reference ${name}`], timings[name])) : "–",
      ),
    ]),
    cases,
  };
}

function measure(size, i) {
  const frame = makeFrame(size);
  /** @type {Record<string, () => number>} */
  const tasks = {};
  for (const [name, method, crosstalk] of methods) {
    const input = { ...frame, method, crosstalk };
    const kernel = openExtraction(input, "f32");
    tasks[name] = kernel.run;
    if (i > 0) continue;
    const reference = openReference(input);
    reference.run();
    kernel.run();
    requireAgreement(name, kernel, reference);
    tasks[`reference ${name}`] = reference.run;
  }
  return { size, timings: timeInTurns(tasks, { rounds: 5 }) };
}
