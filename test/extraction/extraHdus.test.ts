/** What a spectra product holds beyond the spectra, as astropy and fitsverify see it. */
import { mkdtempSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import { measureCrosstalk } from "../../src/extraction/crosstalkMatrix.js";
import { type Extraction, extractFrame } from "../../src/extraction/extract.js";
import { crosstalkHdus, rejectedHdu, scatteredHdu, seenHdu, targetsHdu } from "../../src/extraction/extraHdus.js";
import { writeSpectra } from "../../src/extraction/file.js";
import { neglectedShare, sumFibres, type TargetSpectra } from "../../src/extraction/targets.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";
import { bench, readNoise } from "./twoBlocks.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-extra-"));
const path = join(folder, "spectra.fits");
const exposure = bench("science", { more: "[cosmic_rays]\nrate = 60" });
const { nx, ny } = exposure.truth;
/** As if dispersion ran along axis 2 of the file. */
const upright = frameFromTruth(exposure, readNoise);
const frame = { ...upright, geometry: { ...upright.geometry, axis1: ny, axis2: nx, dispersionAxis: 2 as const } };
const leaks = [
  { lit: 7, fibre: 6, share: 0.0123, error: 0.0004, model: 0.012 },
  { lit: 7, fibre: 8, share: 0.0201, error: 0.0005, model: 0.019 },
];
const check = { frame: "single.fits", estimator: "boxcar" as const, leaks, nDisagree: 0, warnings: [] as string[] };
let extraction: Extraction;
let sums: TargetSpectra;

beforeAll(async () => {
  const tramlines = tramlinesFromTruth(exposure);
  extraction = await extractFrame(frame, tramlines, { method: "boxcar", shift: false });
  sums = sumFibres(extraction.spectra, [
    { name: "star A", fibres: [2, 1, 3] },
    { name: "M 5-11", fibres: [12, 4] },
  ]);
  const extra = [
    ...crosstalkHdus(measureCrosstalk(extraction), true),
    seenHdu([check]),
    rejectedHdu(extraction, frame),
    scatteredHdu(extraction, frame),
    targetsHdu(sums, neglectedShare(extraction, sums)),
  ];
  await writeSpectra(path, extraction, frame, tramlines, { version: "1", options: [], inputs: [], extra });
});
afterAll(() => rmSync(folder, { recursive: true }));

const script = `
import json, sys
import numpy as np
from astropy.io import fits
plain = lambda a: [None if np.isnan(v) else float(v) for v in np.ravel(a)]
with fits.open(sys.argv[1], checksum=True) as f:
    x, m, s, t, r, b = (f[n] for n in ("CROSSTALK", "CROSSTALK_MEAN", "CROSSTALK_SEEN", "TARGETS", "REJECTED", "SCATTERED"))
    reach = x.header["XTREACH"]
    row = lambda k, m: (k - 1) * (2 * reach + 1) + m - k + reach
    print(json.dumps({
        "names": [h.name for h in f][7:],
        "shapes": [list(h.data.shape) for h in (x, m, r, b)],
        "cards": [x.header[k] for k in ("XTESTIM", "XTFROM", "XTCOL1", "XTSTEP", "XTSOLVED")],
        "half": x.header["XTHALF"],
        "own": plain(x.data[row(7, 7)]), "up": plain(x.data[row(7, 8)]), "down": plain(x.data[row(8, 7)]),
        "dead": plain(x.data[row(4, 4)]), "mean": plain(m.data[6]), "reach": reach,
        "seen": [[str(v[0]).strip()] + [float(n) for n in list(v)[1:]] for v in s.data],
        "rejected": np.argwhere(r.data > 0).tolist(), "bits": sorted(set(r.data.ravel().tolist())),
        "scattered": [float(b.data[300, 5]), float(b.data[7, 100])], "unit": b.header["BUNIT"],
        "target": [[n.strip() for n in t.data["NAME"]], [n.strip() for n in t.data["FIBRES"]], t.data["NFIBRE"].tolist()],
        "flux": plain(t.data["FLUX"]), "var": plain(t.data["FLUX_VAR"]), "flags": t.data["FLAGS"].ravel().tolist(),
        "neglected": t.data["NEGLECTED"].tolist(),
    }))
`;

describe("extra HDUs", () => {
  it.skipIf(judgeMissing("fitsverify"))("have neither error nor warning in fitsverify's eyes", () => {
    expect(fitsverify(path)).toEqual([]);
  });

  it.skipIf(judgeMissing("astropy"))("are found by astropy where the description says", () => {
    const read = JSON.parse(python(script, [path]));
    const matrix = measureCrosstalk(extraction);
    const { reach, mean } = matrix;
    const width = 2 * reach + 1;
    expect(read.names).toEqual([
      "POSITIONS",
      "CROSSTALK",
      "CROSSTALK_MEAN",
      "CROSSTALK_SEEN",
      "REJECTED",
      "SCATTERED",
      "TARGETS",
    ]);
    expect(read.shapes).toEqual([
      [13 * width, 5],
      [13, width],
      [nx, ny],
      [nx, ny],
    ]);
    expect(read.cards).toEqual(["boxcar", "model", 33, 64, true]);
    expect(read.half).toBe(extraction.fit.input.halfAperture);
    // Apertures a little below 5 px on a Gaussian of FWHM 2.5 px: somewhat under 98.1 % of its own light and about 0.9 % of
    // a neighbour's (erf), off by what an edge pixel's fraction makes of the light within it; nothing for a dead fibre.
    for (const share of read.own) expect(Math.abs(share - 0.97)).toBeLessThan(0.012);
    for (const share of [...read.up, ...read.down]) expect(Math.abs(share - 0.0105)).toBeLessThan(0.006);
    expect(read.up).not.toEqual(read.down);
    expect(read.dead).toEqual([null, null, null, null, null]);
    expect(read.mean[reach]).toBe(Math.fround(mean[6 * width + reach]));
    expect(read.seen).toEqual(
      leaks.map(({ lit, fibre, share, error, model }) => ["single.fits", lit, fibre, share, error, model]),
    );
  });

  it.skipIf(judgeMissing("astropy"))("turn images of the frame back to where the file has them", () => {
    const read = JSON.parse(python(script, [path]));
    const { rejected } = extraction;
    const expected: number[][] = [];
    for (let x = 0; x < nx; x++) for (let y = 0; y < ny; y++) if (rejected[y * nx + x] & 40) expected.push([x, y]);
    expect(expected.length).toBeGreaterThan(20);
    expect(read.rejected).toEqual(expected);
    expect(read.bits.every((bits: number) => [0, 8, 32].includes(bits))).toBe(true);
    const { coefficients, nX, nY } = extraction.fit.background;
    // P_j by hand at x = 300, y = 5 and at x = 7, y = 100; the background's orders are at most 3 and 5.
    const legendre = (t: number) => [
      1,
      t,
      (3 * t * t - 1) / 2,
      (5 * t ** 3 - 3 * t) / 2,
      (35 * t ** 4 - 30 * t * t + 3) / 8,
    ];
    [
      [300, 5],
      [7, 100],
    ].forEach(([x, y], i) => {
      const [px, py] = [legendre((2 * x) / (nx - 1) - 1), legendre((2 * y) / (ny - 1) - 1)];
      let level = 0;
      for (let a = 0; a < nX; a++) for (let b = 0; b < nY; b++) level += coefficients[a * nY + b] * px[a] * py[b];
      expect(Math.abs(read.scattered[i] - level)).toBeLessThan(1e-5 + 1e-6 * Math.abs(level));
    });
    expect(nX * nY).toBeGreaterThan(3);
    expect(read.unit).toBe("electron");
  });

  it.skipIf(judgeMissing("astropy"))("hold the targets' sums", () => {
    const read = JSON.parse(python(script, [path]));
    expect(read.target).toEqual([
      ["star A", "M 5-11"],
      ["2,1,3", "12,4"],
      [3, 1],
    ]);
    const single = (values: Float64Array) => Array.from(values, (v) => (Number.isNaN(v) ? null : Math.fround(v)));
    expect(read.flux).toEqual(single(sums.flux));
    expect(read.var).toEqual(single(sums.variance));
    expect(read.flags).toEqual([...sums.flags]);
    expect(read.neglected[1]).toBe(0); // one fibre alone
    expect(read.neglected[0]).not.toBe(0);
  });
});
