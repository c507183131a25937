/** The wavelengths that an outside reader gets from the product's header cards. */
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, describe, expect, it } from "vitest";
import { gridWavelength, makeGrid } from "../../src/calibration/grid.js";
import { rebinSpectra } from "../../src/calibration/rebin.js";
import { rebinnedHdus } from "../../src/calibration/rebinFile.js";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { readSpectra } from "../../src/extraction/file.js";
import { encodeFits } from "../../src/fits/encode.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { kill, productBytes, spectraOf } from "./products.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-rebin-"));
afterAll(() => rmSync(folder, { recursive: true }));

const script = `
import json, sys
import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
out = {}
with fits.open(sys.argv[1], checksum=True) as f:
    for h in f[1:]:
        if h.header["XTENSION"] != "IMAGE": continue
        w = WCS(h.header)
        out[h.name] = (w.pixel_to_world_values(np.arange(h.data.shape[1]), 2)[0] * 1e10).tolist()
        out.setdefault("fibre", float(w.pixel_to_world_values(7, 2)[1]))
    w = WCS(f["FLUX"].header).sub([1])
    out["type"] = [w.wcs.ctype[0], w.wcs.specsys, str(w.wcs.cunit[0])]
    out["image"] = f["WAVELENGTH"].data[0].tolist()
    out["medium"] = f["WAVELENGTH"].header["MEDIUM"]
    out["targets"] = [str(n) for n in f["TARGETS"].data["NAME"]]
    out["sum"] = np.nan_to_num(f["TARGETS"].data["FLUX"][0]).tolist()
    out["history"] = str(f[0].header["HISTORY"])
    out["rest"] = f["BIN_COV"].header["COVREST"]
print(json.dumps(out))
`;

const nFibre = 6;
const nx = 200;
const input = {
  spectra: spectraOf(nFibre, nx, (k, x) => 100 * (k + 1) + x),
  wavelengths: Float64Array.from({ length: nFibre * nx }, (_, i) => 5600 - 0.83 * (i % nx) + 0.2 * Math.floor(i / nx)),
  sky: new Float32Array(nFibre * nx).fill(7),
  targets: [{ name: "M 1", fibres: [1, 2, 5] }],
};
kill(input.spectra, 3);

describe.each([
  ["linear", "air", "AWAV"],
  ["log", "air", "AWAV-LOG"],
  ["linear", "vacuum", "WAVE"],
  ["log", "vacuum", "WAVE-LOG"],
] as const)("%s grid in %s", (kind, medium, type) => {
  const path = join(folder, `${kind}-${medium}.fits`);
  const made = (async () => {
    const product = await readProduct(await inMemory(medium));
    const wavelengths = product.wavelengths!;
    const grid = makeGrid({ kind }, wavelengths.image, nx, medium);
    const rebinned = rebinSpectra(product, wavelengths, grid);
    const history = { version: "9.8.7", options: [`grid ${kind}`], inputs: [{ name: "a.fits", checksum: "0123" }] };
    writeFileSync(path, encodeFits(rebinnedHdus(product, rebinned, history)));
    return { grid, rebinned };
  })();

  it.skipIf(judgeMissing("astropy"))("astropy reads the same wavelengths to 1e-6 Å, in every image", async () => {
    const { grid, rebinned } = await made;
    const seen = JSON.parse(python(script, [path]));
    expect(seen.type).toEqual([type, "TOPOCENT", "m"]); // standard units: Å come in metres
    expect(seen.medium).toBe(medium);
    expect(seen.fibre).toBe(3);
    for (const name of [
      "FLUX",
      "FLUX_VAR",
      "NEIGHBOUR_COV",
      "FLAGS",
      "CHI2",
      "BACKGROUND",
      "BIN_COV",
      "WAVELENGTH",
      "SKY",
    ]) {
      expect(seen[name].length, name).toBe(grid.n);
      let worst = 0;
      for (let b = 0; b < grid.n; b++) {
        // Own formula, with the language's exp: not the grid's.
        const own = kind === "linear" ? grid.start + b * grid.step : grid.start * Math.exp(b * grid.step);
        worst = Math.max(worst, Math.abs(seen[name][b] - own), Math.abs(seen.image[b] - own));
      }
      expect(worst, name).toBeLessThan(1e-6);
    }
    expect(seen.targets).toEqual(["M 1"]);
    const { flux } = rebinned.spectra;
    // Targets add up at the same wavelength; fibre 4 is dead, and no member.
    const at = Math.floor(grid.n / 2);
    const expected = [0, 1, 4].reduce((sum, k) => sum + flux[k * grid.n + at], 0);
    expect(seen.sum[at]).toBeCloseTo(expected, 2);
    expect(seen.history).toContain("grid " + kind);
    expect(gridWavelength(grid, 0)).toBeCloseTo(5600 - 0.83 * (nx - 1), 9);
  });

  it.skipIf(judgeMissing("fitsverify"))("fitsverify has nothing against it", async () => {
    await made;
    expect(fitsverify(path)).toEqual([]);
  });

  it("is read back as spectra that were rebinned", async () => {
    const { rebinned } = await made;
    const back = await readProduct(path);
    expect(back.rebinned).toBe(true);
    expect(Array.from(back.columnCovariance!.subarray(0, 50))).toEqual(
      Array.from(Float32Array.from(rebinned.binCovariance.subarray(0, 50))),
    );
    expect((await readSpectra(path)).nx).toBe(rebinned.grid.n);
    expect(back.targets).toEqual([{ target: input.targets[0], neglected: 0.0125 }]);
    const state = back.positions.columns.find(({ name }) => name === "STATE")!.data;
    expect(state).toEqual(["lit", "lit", "lit", "dead", "lit", "lit"]);
  });
});

async function inMemory(medium: string): Promise<string> {
  const path = join(folder, `input-${medium}.fits`);
  writeFileSync(path, productBytes({ ...input, medium }));
  return path;
}

it("a product whose wavelengths do not say their medium is refused", async () => {
  const path = join(folder, "unsaid.fits");
  writeFileSync(path, productBytes({ ...input, medium: "" }));
  await expect(readProduct(path)).rejects.toThrow(
    "MEDIUM is missing, so that wavelengths may be in air or in vacuum; set it to 'air' or 'vacuum'.",
  );
});
