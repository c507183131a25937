import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import { type Extraction, extractFrame } from "../../src/extraction/extract.js";
import { readPositions, readSpectra, spectraHdus, writeSpectra } from "../../src/extraction/file.js";
import { encodeFits } from "../../src/fits/encode.js";
import { Header } from "../../src/fits/header.js";
import { readTable } from "../../src/fits/table.js";
import { Flag, MaskBit } from "../../src/reference/bits.js";
import { legendreValue } from "../../src/reference/legendre.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { frameScene } from "./frames.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-spectra-"));
const path = join(folder, "spectra.fits");
const { frame, tramlines } = frameScene({ nx: 50 }, [3, 11]);
frame.header = new Header([
  { keyword: "OBJECT", value: "field 12", comment: "as the observer named it" },
  { keyword: "EXPTIME", value: 900.5, comment: "s" },
  { keyword: "EXMETHOD", value: "stale", comment: "left by an earlier product" },
]);
frame.mask[40 * 50 + 7] = MaskBit.saturated;
const product = {
  version: "9.8.7",
  options: ["method = optimal"],
  inputs: [{ name: "scene.fits", checksum: "0123456789abcdef" }],
  sky: [5, 12],
};
let extraction: Extraction;

beforeAll(async () => {
  extraction = await extractFrame(frame, tramlines, { method: "optimal", crosstalk: false });
  await writeSpectra(path, extraction, frame, tramlines, product);
});
afterAll(() => rmSync(folder, { recursive: true, force: true }));

const astropyScript = `
import json, sys
import numpy as np
from astropy.io import fits
with fits.open(sys.argv[1], checksum=True) as f:
    out = {
        "names": [h.name for h in f], "bitpix": [h.header["BITPIX"] for h in f],
        "units": [h.header.get("BUNIT") for h in f],
        "sums": [("CHECKSUM" in h.header) and ("DATASUM" in h.header) for h in f],
        "shape": list(f["FLUX"].data.shape),
        "flux": [None if np.isnan(v) else float(v) for v in f["FLUX"].data.ravel()],
        "flags": f["FLAGS"].data.ravel().tolist(),
        "primary": {k: f[0].header[k] for k in ("OBJECT", "EXPTIME", "EXMETHOD", "XTALKCOR", "SPECVERS")},
        "history": "\\n".join(str(v) for v in f[0].header["HISTORY"]),
        "fibre": f["POSITIONS"].data["FIBRE"].tolist(), "role": f["POSITIONS"].data["ROLE"].tolist(),
        "snr": [None if np.isnan(v) else float(v) for v in f["POSITIONS"].data["MEDIAN_SNR"]],
    }
print(json.dumps(out))
`;

describe("file of spectra", () => {
  it("tells each fibre's shift, which grows along the slit, and 0 where none was applied", async () => {
    const shift = { coefficients: [0.1, 0.02, 0.05], errors: [0.001, 0.002, 0.002], nPoint: 99, rms: 0.01 };
    const table = async (moved: Extraction) => {
      const bytes = encodeFits(spectraHdus(moved, frame, tramlines, product));
      return readTable(bytes, "POSITIONS", { columns: ["SHIFT"] });
    };
    const told = await table({ ...extraction, shift: shift as Extraction["shift"] });
    const nCoef = tramlines.degree + 1;
    tramlines.state.forEach((_, k) => {
      const y = legendreValue(tramlines.legendre, 0, k * nCoef, nCoef);
      const expected = 0.1 + 0.05 * ((2 * y) / (tramlines.ny - 1) - 1);
      expect((told.columns[0].data as Float64Array)[k]).toBeCloseTo(expected, 12);
    });
    expect(told.primaryHeader.number("SHIFTMID")).toBe(0.1);
    const untouched = await table({ ...extraction, shift: null });
    expect([...(untouched.columns[0].data as Float64Array)]).toEqual(new Array(17).fill(0));
  });

  it.skipIf(judgeMissing("fitsverify"))("has neither error nor warning in fitsverify's eyes", () => {
    expect(fitsverify(path)).toEqual([]);
  });

  it.skipIf(judgeMissing("astropy"))("is read by astropy: names, units, numbers, header and table", () => {
    const read = JSON.parse(python(astropyScript, [path]));
    const images = ["FLUX", "FLUX_VAR", "NEIGHBOUR_COV", "FLAGS", "CHI2", "BACKGROUND"];
    expect(read.names).toEqual(["PRIMARY", ...images, "POSITIONS"]);
    expect(read.bitpix).toEqual([8, -32, -32, -32, 32, -32, -32, 8]);
    expect(read.units).toEqual([null, "electron", "electron2", "electron2", "", "", "electron", null]);
    expect(read.sums.every((there: boolean) => there)).toBe(true);
    expect(read.shape).toEqual([17, 50]);
    const flux = Array.from(extraction.spectra.flux, (v) => (Number.isNaN(v) ? null : Math.fround(v)));
    expect(read.flux).toEqual(flux);
    expect(read.flags).toEqual([...extraction.spectra.flags]);
    expect(read.primary).toEqual({
      OBJECT: "field 12",
      EXPTIME: 900.5,
      EXMETHOD: "optimal",
      XTALKCOR: false,
      SPECVERS: 1,
    });
    for (const said of ["9.8.7", "method = optimal", "scene.fits", "0123456789abcdef"]) {
      expect(read.history).toContain(said);
    }
    expect(read.fibre).toEqual(Array.from({ length: 17 }, (_, k) => k + 1));
    expect(read.role.map((role: string, k: number) => `${k + 1} ${role.trim()}`)).toEqual(
      read.fibre.map((k: number) => `${k} ${[4, 12].includes(k) ? "spare" : k === 5 ? "sky" : "target"}`),
    );
    expect(read.snr[3]).toBeNull();
    expect(read.snr[4]).toBeGreaterThan(1);
  });

  it("comes back bit for bit, dead fibres NaN and flagged, in their own rows", async () => {
    const { spectra } = extraction;
    const back = await readSpectra(path);
    for (const image of ["flux", "variance", "neighbourCovariance", "chi2", "background"] as const) {
      const [a, b] = [Float32Array.from(spectra[image]), back[image] as Float32Array];
      expect(new Uint8Array(b.buffer)).toEqual(new Uint8Array(a.buffer));
    }
    expect(back.flags).toEqual(spectra.flags);
    expect([back.nFibre, back.nx, back.method, back.crosstalkCorrected]).toEqual([17, 50, "optimal", false]);
    for (const k of [3, 11]) {
      for (let x = 0; x < 50; x++) {
        expect(back.flux[k * 50 + x]).toBeNaN();
        expect(back.flags[k * 50 + x]).toBe(Flag.dead);
        expect(back.neighbourCovariance[(k - 1) * 50 + x]).toBeNaN(); // the next position has no value
      }
    }
    expect((await readPositions(path)).state.map((state) => state.trim())[11]).toBe("dead");
  });

  it("is the same bytes when written again, and not overwritten unasked", async () => {
    const again = join(folder, "again.fits");
    await writeSpectra(again, extraction, frame, tramlines, product);
    expect(readFileSync(again).equals(readFileSync(path))).toBe(true);
    await expect(writeSpectra(again, extraction, frame, tramlines, product)).rejects.toThrow(/again\.fits.*exists/);
  });

  it("is refused when it is no such product, or a newer one", async () => {
    const other = join(folder, "other.fits");
    const bytes = readFileSync(path);
    const card = bytes.indexOf("SPECVERS");
    const newer = Buffer.from(bytes);
    newer.write("7", card + 29);
    writeFileSync(other, newer);
    await expect(readSpectra(other)).rejects.toThrow("format version 7 is newer than 1");
    const none = Buffer.from(bytes);
    none.write("SPECVERZ", card);
    writeFileSync(other, none);
    await expect(readSpectra(other)).rejects.toThrow("this is no file of extracted spectra");
  });
});
