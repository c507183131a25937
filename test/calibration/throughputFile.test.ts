import { mkdtempSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import type { Throughput } from "../../src/calibration/throughput.js";
import { fibreLevels, readThroughput, throughputHdus, writeThroughput } from "../../src/calibration/throughputFile.js";
import { encodeFits } from "../../src/fits/encode.js";
import { Header } from "../../src/fits/header.js";
import { fitsverify, judgeMissing } from "../judges.js";

let folder: string;
beforeAll(() => {
  folder = mkdtempSync(join(tmpdir(), "throughput-"));
});
afterAll(() => {
  rmSync(folder, { recursive: true });
});

const throughput: Throughput = {
  nFibre: 3,
  nx: 4,
  relative: Float32Array.of(0.9, 0.91, 0.93, 0.96, ...new Array(4).fill(Number.NaN), 1.1, 1.125, 1.0625, 1),
  variance: Float32Array.of(1e-6, 2e-6, 3e-6, 4e-6, ...new Array(4).fill(Number.NaN), 5e-6, 6e-6, 7e-6, 8e-6),
  geometryDigest: "0123456789abcdef",
};
const options = {
  version: "9.9.9",
  options: ["tramlines t.fits"],
  inputs: [{ name: "twi_01.fits", checksum: "12345" }],
  header: new Header([{ keyword: "OBJECT", value: "twilight", comment: "what was seen" }]),
};

describe("the throughput file", () => {
  it("gives back every number that was written", async () => {
    const path = join(folder, "round.fits");
    await writeThroughput(path, throughput, options);
    expect(await readThroughput(path)).toEqual(throughput);
  });

  it.skipIf(judgeMissing("fitsverify"))("is sound in the eyes of fitsverify", async () => {
    const path = join(folder, "judged.fits");
    await writeThroughput(path, throughput, options);
    expect(fitsverify(path)).toEqual([]);
  });

  it("has each fibre's level in its table", () => {
    const levels = fibreLevels(throughput);
    expect(levels[0]).toBeCloseTo(0.92, 6);
    expect(levels[1]).toBeNaN();
  });

  it("is refused when it holds something else", async () => {
    const hdus = throughputHdus(throughput, options);
    const [primary, ...others] = hdus;
    const header = (primary as { header: { keyword: string; value?: unknown }[] }).header;
    const newer = header.map((card) => (card.keyword === "THRUVERS" ? { ...card, value: 2 } : card));
    const bytes = encodeFits([{ kind: "primary", header: newer as never }, ...others]);
    await expect(readThroughput(bytes, "t.fits")).rejects.toThrow(
      "t.fits: format 2, but 1 is the newest known; measure it again with 'hatchel throughput'.",
    );
    const short = throughputHdus({ ...throughput, variance: throughput.variance }, options).map((hdu) =>
      hdu.kind === "image" && hdu.name === "THROUGHPUT_VAR" ? { ...hdu, ny: 1, data: new Float32Array(4) } : hdu,
    );
    await expect(readThroughput(encodeFits(short), "t.fits")).rejects.toThrow(
      "t.fits: THROUGHPUT is 4 × 3, but THROUGHPUT_VAR 4 × 1",
    );
  });
});
