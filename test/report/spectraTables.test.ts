/** Tables of single fibres and targets, as an outside reader finds them. */
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, describe, expect, it } from "vitest";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { encodeFits } from "../../src/fits/encode.js";
import { ecsvText, fibreTables, tableHdus, targetTables } from "../../src/report/spectraTables.js";
import { productBytes, spectraOf } from "../calibration/products.js";
import { fitsverify, judgeMissing, python } from "../judges.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-tables-"));
afterAll(() => rmSync(folder, { recursive: true }));
const nFibre = 4;
const nx = 30;
// Fibres 1 and 2 lie 0.02 px apart in wavelength, 3 and 4 half a pixel from them.
const offset = [0, 0.02, 0.5, 0.5];
const parts = {
  spectra: spectraOf(
    nFibre,
    nx,
    (k, x) => 1000 * (k + 1) + x / 3,
    (k, x) => 2 + k + x / 7,
  ),
  wavelengths: Float64Array.from(
    { length: nFibre * nx },
    (_, i) => 5000 + 1.5 * ((i % nx) + offset[Math.floor(i / nx)]),
  ),
  sky: Float32Array.from({ length: nFibre * nx }, (_, i) => i / 9),
  targets: [
    { name: "NGC 1 / a", fibres: [1, 2] },
    { name: "b", fibres: [2, 3] },
  ],
  cards: [
    { keyword: "OBJECT", value: "field 12", comment: "" },
    { keyword: "EXPTIME", value: 900.5, comment: "s" },
  ],
};
parts.spectra.flags[7] = 513;
parts.spectra.flux[7] = Number.NaN;

const script = `
import json, sys
import numpy as np
from astropy.table import Table
out = []
for path, form in ((sys.argv[1], "ascii.ecsv"), (sys.argv[2], "fits")):
    t = Table.read(path, format=form)
    hexed = lambda n: np.ma.filled(t[n], np.nan if t[n].dtype.kind == "f" else 0).astype(t[n].dtype.newbyteorder("<")).tobytes().hex()
    out.append({"names": t.colnames, "units": [None if t[n].unit is None else str(t[n].unit) for n in t.colnames],
        "bytes": [hexed(n) for n in t.colnames],
        "meta": {k.lower(): v for k, v in t.meta.items() if k.lower() in ("fibre", "medium", "object", "exptime", "state", "rebinned")}})
print(json.dumps(out))
`;

describe("tables of fibres", () => {
  it.skipIf(judgeMissing("astropy"))("hold the product's numbers to the bit, as ECSV and as FITS", async () => {
    const path = join(folder, "s.fits");
    writeFileSync(path, productBytes(parts));
    const product = await readProduct(path);
    const [table] = fibreTables(product, [2]);
    expect(table.file).toBe("fibre_2");
    writeFileSync(join(folder, "t.ecsv"), ecsvText(table));
    writeFileSync(join(folder, "t.fits"), encodeFits(tableHdus(table, [])));
    if (!judgeMissing("fitsverify")) expect(fitsverify(join(folder, "t.fits"))).toEqual([]);
    const seen = JSON.parse(python(script, [join(folder, "t.ecsv"), join(folder, "t.fits")]));
    const row = Array.from({ length: nx }, (_, x) => x);
    const single = (value: (x: number) => number) => Buffer.from(Float32Array.from(row, value).buffer).toString("hex");
    const double = (value: (x: number) => number) => Buffer.from(Float64Array.from(row, value).buffer).toString("hex");
    const whole = (value: (x: number) => number) => Buffer.from(Int32Array.from(row, value).buffer).toString("hex");
    for (const one of seen) {
      expect(one.names).toEqual(["column", "wavelength", "flux", "flux_error", "flags", "sky"]);
      expect(one.units).toEqual([null, "Angstrom", "electron", "electron", null, "electron"]);
      expect(one.bytes).toEqual([
        whole((x) => x + 1),
        double((x) => parts.wavelengths[nx + x]),
        single((x) => 2000 + x / 3),
        // As the product holds the variance, in single precision.
        single((x) => Math.sqrt(Math.fround(3 + x / 7))),
        whole(() => 0),
        single((x) => (nx + x) / 9),
      ]);
      const { fibre, medium, object, exptime, state, rebinned } = one.meta;
      expect([fibre, medium, object, exptime, state.trim(), rebinned]).toEqual([
        2,
        "air",
        "field 12",
        900.5,
        "lit",
        false,
      ]);
    }
  });

  it("count what can be trusted, and name targets by letters that every file system takes", async () => {
    const path = join(folder, "s2.fits");
    writeFileSync(path, productBytes(parts));
    const product = await readProduct(path);
    expect(fibreTables(product, [1, 4]).map(({ usable }) => usable)).toEqual([nx - 1, nx]);
    const [a, b] = targetTables(product);
    expect([a.file, b.file]).toEqual(["target_NGC_1_a", "target_b"]);
    const data = (table: typeof a, name: string) => table.columns.find((one) => one.name === name)!.data;
    expect(data(a, "flux")[3]).toBe(Math.fround(1001 + 2001));
    // Variances 2 + 3 + 6/7, and twice the covariance of −0.1 between neighbours.
    expect(data(a, "flux_error")[3]).toBeCloseTo(Math.sqrt(5 + 6 / 7 - 0.2), 6);
    expect(data(a, "wavelength")[3]).toBeCloseTo(5000 + 1.5 * 3.01, 9);
    // Half a pixel apart: the sum mixes two wavelengths.
    expect(data(b, "wavelength")[3]).toBeNaN();
  });
});
