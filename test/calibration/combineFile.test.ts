/** The file of a combination, as an outside reader sees it: three frames of which the light and the noise are known. */
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, describe, expect, it } from "vitest";
import { combinedHdus } from "../../src/calibration/combineFile.js";
import { combineSpectra } from "../../src/calibration/combineSpectra.js";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { encodeFits } from "../../src/fits/encode.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { kill, productBytes } from "./products.js";
import { frameOf } from "./stacks.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-combined-"));
afterAll(() => rmSync(folder, { recursive: true }));

const [nFibre, nx] = [6, 200];
const scales = [1, 0.5, 2];
const seconds = [900, 450, 1800];
const light = (k: number, x: number) => 4000 * (1 + k) + 5 * x;
const wavelengths = Float64Array.from({ length: nFibre * nx }, (_, i) => 5600 + 0.83 * (i % nx));

const script = `
import json, sys
import numpy as np
from astropy.io import fits
with fits.open(sys.argv[1], checksum=True) as f:
    h = f[0].header
    t = f["FRAMES"].data
    print(json.dumps({
        "names": [x.name for x in f[1:]],
        "cards": {k: h.get(k) for k in ("NCOMBINE", "EXPTOTAL", "EXPTIME", "NREJECT", "SHIFTMID", "OBJECT")},
        "history": str(h["HISTORY"]),
        "frames": {c: np.asarray(t[c]).tolist() for c in ("NAME", "EXPTIME", "SCALE", "WEIGHT", "APART", "MOVED")},
        "positions": f["POSITIONS"].columns.names,
        "snr": [None if np.isnan(v) else float(v) for v in f["POSITIONS"].data["MEDIAN_SNR"]],
        "nframes": [int(f["NFRAMES"].data[0, 50]), int(f["NFRAMES"].data[2, 50]), int(f["NFRAMES"].data[3, 50])],
        "medium": f["WAVELENGTH"].header["MEDIUM"],
        "wavelength": f["WAVELENGTH"].data[1, 100],
        "sky": float(f["SKY"].data[1, 100]),
        "targets": [str(n) for n in f["TARGETS"].data["NAME"]],
        "sum": float(f["TARGETS"].data["FLUX"][0][100]),
        "flux": [float(f["FLUX"].data[k, 100]) for k in (0, 1, 4)],
    }))
`;

const made = (async () => {
  const paths = scales.map((scale, i) => {
    const { spectra } = frameOf([nFibre, nx], light, `file ${i}`, { scale });
    // A fibre dead in all, and another without a value in the second frame.
    kill(spectra, 3);
    if (i === 1) kill(spectra, 2);
    const path = join(folder, i === 1 ? "zwölf.fits" : `frame_${i}.fits`);
    const cards = [
      { keyword: "EXPTIME", value: seconds[i], comment: "" },
      { keyword: "OBJECT", value: "M 1", comment: "" },
      { keyword: "NREJECT", value: 17, comment: "" },
      { keyword: "SHIFTMID", value: 0.3, comment: "" },
    ];
    const sky = new Float32Array(nFibre * nx).fill(40 * scale);
    const targets = [{ name: "M 1", fibres: [1, 2, 5] }];
    writeFileSync(path, productBytes({ spectra, wavelengths, medium: "vacuum", sky, cards, targets }));
    return path;
  });
  const products = await Promise.all(paths.map(readProduct));
  const combined = combineSpectra(products);
  const history = { version: "9.8.7", options: ["kappa 5"], inputs: [{ name: "frame_0.fits", checksum: "0123" }] };
  const path = join(folder, "combined.fits");
  writeFileSync(path, encodeFits(combinedHdus(products, combined, history)));
  return { path, products, combined, history };
})();

describe("a file of combined spectra", () => {
  it.skipIf(judgeMissing("astropy"))(
    "holds what went into it, frame by frame, and nothing of one frame alone",
    async () => {
      const { path } = await made;
      const seen = JSON.parse(python(script, [path]));
      expect(seen.cards).toEqual({
        NCOMBINE: 3,
        EXPTOTAL: 3150,
        EXPTIME: 900,
        NREJECT: null,
        SHIFTMID: null,
        OBJECT: "M 1",
      });
      expect(seen.history).toContain("kappa 5");
      expect(seen.frames.NAME).toEqual(["frame_0.fits", "zw?lf.fits", "frame_2.fits"]);
      expect(seen.frames.EXPTIME).toEqual(seconds);
      seen.frames.SCALE.forEach((scale: number, i: number) => {
        expect(Math.abs(scale / scales[i] - 1)).toBeLessThan(0.01);
      });
      // Photons dominate: information goes with light, apart from one fibre in five that the second frame lacks.
      const information = [1, 0.5 * 0.83, 2];
      seen.frames.WEIGHT.forEach((weight: number, i: number) => {
        expect(Math.abs(weight - information[i] / 3.415)).toBeLessThan(0.03);
      });
      expect(seen.frames.APART).toEqual([0, 0, 0]);
      expect(seen.frames.MOVED).toEqual([false, false, false]);
      expect(seen.positions).not.toContain("SHIFT");
      expect(seen.nframes).toEqual([3, 2, 0]);
      expect([seen.medium, seen.wavelength]).toEqual(["vacuum", wavelengths[100]]);
      expect(Math.abs(seen.sky / 40 - 1)).toBeLessThan(0.02);
      // S/N of 3.5 times the first frame's light: √(3.5 · light), the read noise a trifle.
      for (const k of [0, 1, 4]) {
        expect(Math.abs(seen.snr[k] / Math.sqrt(3.5 * light(k, nx / 2)) - 1), `fibre ${k + 1}`).toBeLessThan(0.03);
      }
      expect(seen.snr[3]).toBeNull();
      expect(seen.targets).toEqual(["M 1"]);
      const sum = seen.flux.reduce((a: number, b: number) => a + b, 0);
      expect(Math.abs(seen.sum / sum - 1)).toBeLessThan(1e-6);
    },
  );

  it.skipIf(judgeMissing("fitsverify"))("has nothing against it by fitsverify", async () => {
    expect(fitsverify((await made).path)).toEqual([]);
  });

  it("leaves out what frames do not have, and sums other targets when asked", async () => {
    const { products, combined, history } = await made;
    const names = (hdus: ReturnType<typeof combinedHdus>) => hdus.map((hdu) => ("name" in hdu ? hdu.name : ""));
    expect(names(combinedHdus(products, combined, history))).not.toContain("COLUMN_COV");
    const { sky: _sky, ...bare } = combined;
    const without = names(combinedHdus(products, bare, history, []));
    expect(without).not.toContain("SKY");
    expect(without).not.toContain("TARGETS");
    expect(without.slice(-2)).toEqual(["POSITIONS", "FRAMES"]);
  });
});
