// The main row: joint extraction of a whole frame. Who takes part does the same work on the same frame (bench/loop/joint.mjs
// lists it): windows and weights at six nodes a block, three solves, rejection with the profile's misfit, background
// surface, variances and neighbours' covariances, flags, χ², suspects. The frame lies ready in the memory of each; copies
// in are timed apart. 'With wings' does more than the others: a profile that is known on 12 rows beside the windows.
import { requireAgreement } from "./agreement.mjs";
import { makeFrame, sizes } from "./frame.mjs";
import { canShare, openExtraction, withShape, withWings } from "./kernel.mjs";
import { JointLoop } from "./loop/joint.mjs";
import { copyRate } from "./machine.mjs";
import { hasScipy, runNumpy } from "./numpy/joint.mjs";
import { openReference } from "./reference.mjs";
import { duration, figures, times } from "./table.mjs";
import { ratio, timeInTurns, timing } from "./timing.mjs";

export const title =
  "joint extraction of a frame, pitch 5 px, window ± 6 px, FWHM 2.4 px, three solves, rejection, background, covariances";

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const scipy = hasScipy();
  const rate = copyRate();
  const cases = sizes.slice(0, small ? 2 : 3).map((size, i) => measure(size, i, scipy));
  const head = [
    "fibres × columns",
    "f32",
    "f32, 2 threads",
    "f64",
    "empirical, f32",
    "empirical with wings, f32",
    "copies in",
    "JS loop",
    "numpy/scipy",
    "reference",
  ];
  const ratios = [
    "loop ÷ f32",
    "numpy ÷ f32",
    "1 ÷ 2 threads",
    "empirical ÷ Gaussian",
    "with wings ÷ Gaussian",
    "f64 ÷ f32",
    "reference ÷ f32",
    "× copying",
  ];
  return {
    head: [...head, ...ratios],
    rows: cases.map(({ size, timings, ratios: found }) => [
      `${size.nFibre} × ${size.nx}`,
      ...["f32", "shared", "f64", "empirical", "wings", "copiesIn", "loop", "numpy", "reference"].map((name) =>
        timings[name] ? duration(timings[name].median) : "–",
      ),
      ...["loop", "numpy", "shared", "empirical", "wings", "f64", "reference"].map((name) =>
        found[name] ? times(found[name]) : "–",
      ),
      figures((timings.f32.median * rate) / leastBytes(size)),
    ]),
    notes: [
      "'× copying': the kernel's time over that of moving its least traffic (frame, mask and marks once; six images) at the rate " +
        `of a plain copy in this run, ${figures(rate / 1e6)} GB/s read and written.`,
      ...(scipy ? [] : ["numpy/scipy left out: /usr/bin/python3 has no scipy."]),
      ...(canShare ? [] : ["Two threads left out: memory cannot be shared here."]),
    ],
    cases,
  };
}

function measure(size, i, scipy) {
  const input = makeFrame(size);
  const loop = new JointLoop(input);
  loop.run();
  const f32 = openExtraction(input, "f32");
  const f64 = openExtraction(input, "f64");
  const shared = canShare ? openExtraction(input, "f32", { nThread: 2 }) : undefined;
  const empirical = openExtraction(withShape(input), "f32");
  const wings = openExtraction(withWings(input), "f32");
  for (const [name, one] of Object.entries({ f32, f64, ...(shared ? { shared } : {}), empirical })) {
    one.run();
    requireAgreement(`joint ${name}`, one, loop);
  }
  /** @type {Record<string, () => number>} */
  const tasks = {
    f32: f32.run,
    loop: () => {
      loop.rejected.fill(0);
      loop.run();
      return loop.output.flux[0];
    },
    ...(shared ? { shared: shared.run } : {}),
    empirical: empirical.run,
    wings: wings.run,
    f64: f64.run,
    copiesIn: () => openExtraction(input, "f32").output.flux.length,
  };
  if (i === 0) {
    const reference = openReference(input);
    reference.run();
    requireAgreement("joint reference", reference, loop);
    tasks.reference = reference.run;
  }
  const timings = timeInTurns(tasks, { rounds: [9, 7, 5][i], milliseconds: [100, 0, 0][i] });
  if (scipy) {
    const numpy = runNumpy(input, [3, 2, 1][i]);
    requireAgreement("joint numpy", numpy, loop);
    timings.numpy = timing(numpy.milliseconds);
  }
  const over = (name) => (timings[name] ? ratio(timings[name], timings.f32) : undefined);
  const ratios = {
    ...{
      loop: over("loop"),
      numpy: over("numpy"),
      empirical: over("empirical"),
      wings: over("wings"),
      f64: over("f64"),
      reference: over("reference"),
    },
    shared: timings.shared ? ratio(timings.f32, timings.shared) : undefined,
  };
  return { size, timings, ratios };
}

/** Frame f32, mask u8, marks u8 read and written; six images of 4 bytes. */
function leastBytes({ nFibre, nx, ny }) {
  return nx * ny * (4 + 1 + 2) + 24 * nFibre * nx;
}
