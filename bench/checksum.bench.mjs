// The FITS checksum of a frame's bytes: the kernel on bytes in its memory, as readers and writers take it; the reference, which
// sums two columns of bytes side by side, as quick as plain JavaScript gets; word by word through DataView, as the standard
// (appendix J) puts it. The same bytes, the same sum.
import { checksum } from "../dist/kernels/checksum.js";
import { checksum as checksumByReference } from "../dist/reference/checksum.js";
import { seeded } from "./frame.mjs";
import { kernels } from "./kernel.mjs";
import { duration, figures, times } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

export const title = "FITS checksum";

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const cases = [2 ** 16, 2 ** 22, 2 ** 25].slice(0, small ? 2 : 3).map(measure);
  const names = ["kernel", "reference", "words"];
  return {
    head: ["bytes", "kernel", "reference", "word by word", "reference ÷ kernel", "words ÷ kernel", "kernel, GB/s"],
    rows: cases.map(({ n, timings }) => [
      String(n),
      ...names.map((name) => duration(timings[name].median)),
      ...names.slice(1).map((name) => times(ratio(timings[name], timings.kernel))),
      figures(n / timings.kernel.median / 1e6),
    ]),
    cases,
  };
}

function measure(n) {
  const next = seeded(n);
  const bench = kernels.workbench(n);
  const bytes = bench.uint8(n);
  for (let i = 0; i < n; i++) bytes[i] = 256 * next();
  const sums = {
    kernel: () => checksum(bench, bytes),
    reference: () => checksumByReference(bytes),
    words: () => byWords(bytes),
  };
  if (sums.kernel() !== sums.words() || sums.reference() !== sums.words())
    throw new Error("checksum: the sums differ.");
  return { n, timings: timeInTurns(sums, { milliseconds: 20 }) };
}

function byWords(bytes) {
  const view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength);
  let sum = 0; // ones' complement: what runs over is added below
  for (let at = 0; at < bytes.length; at += 4) {
    sum += view.getUint32(at);
    if (sum > 0xffffffff) sum -= 0xffffffff;
  }
  return sum;
}
