import { mkdtempSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import { type ArcResult, measureWavelengths } from "../../src/calibration/arc.js";
import { lampLines } from "../../src/calibration/lamps.js";
import { readWavelengths, wavelengthHdus, writeWavelengths } from "../../src/calibration/wavelengthFile.js";
import { encodeFits, type OutputHdu } from "../../src/fits/encode.js";
import { Header } from "../../src/fits/header.js";
import { fitsverify, judgeMissing, python } from "../judges.js";
import { extractArcs } from "./arcScene.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-wavelengths-"));
const path = join(folder, "wavelengths.fits");
const options = {
  version: "9.8.7",
  options: ["range 5750 7430"],
  inputs: [{ name: "/night/arc_01.fits", checksum: "0123456789abcdef" }],
  header: new Header([
    { keyword: "OBJECT", value: "NeAr", comment: "lamps" },
    { keyword: "WAVERMS", value: 99, comment: "left by an earlier product" },
  ]),
};
let result: ArcResult;

beforeAll(async () => {
  const { exposures, tramlines } = await extractArcs("arc_01", "arc_02");
  result = measureWavelengths(exposures, tramlines, lampLines(["Ne", "Ar"]), [5750, 7430]);
  await writeWavelengths(path, result, options);
}, 120_000);
afterAll(() => rmSync(folder, { recursive: true, force: true }));

const astropyScript = `
import json, sys
import numpy as np
from astropy.io import fits
with fits.open(sys.argv[1], checksum=True) as f:
    w, lines = f["WAVELENGTHS"].data, f["LINES"].data
    k = int(sys.argv[2])
    x = np.linspace(-1, 1, f[0].header["WAVENX"])
    print(json.dumps({
        "wave": np.polynomial.legendre.legval(x, w["LEGENDRE"][k]).tolist()[::100],
        "state": w["STATE"].tolist(), "unit": f["WAVELENGTHS"].columns["LEGENDRE"].unit,
        "history": "\\n".join(str(v) for v in f[0].header["HISTORY"]), "object": f[0].header["OBJECT"],
        "rms": f[0].header["WAVERMS"], "medium": f[0].header["WAVEMED"], "offset": f[0].header["WAVEOF2"],
        "used": int(lines["USED"].sum()), "n": len(lines), "residual": float(np.sqrt(np.mean(lines["RESIDUAL"][lines["USED"] == 1] ** 2))),
    }))
`;

describe("file of wavelengths", () => {
  it.skipIf(judgeMissing("fitsverify"))("pleases fitsverify", () => {
    expect(fitsverify(path)).toEqual([]);
  });

  it.skipIf(judgeMissing("astropy"))("is read by astropy and numpy as it was meant", () => {
    const seen = JSON.parse(python(astropyScript, [path, "7"]));
    const { solution } = result;
    expect(seen.wave[0]).toBeCloseTo(
      Array.from(solution.legendre.subarray(7 * (solution.degree + 1), 8 * (solution.degree + 1))).reduce(
        (sum, c, j) => sum + (j % 2 === 0 ? c : -c),
        0,
      ),
      9,
    );
    expect(seen.state.filter((state: string) => state === "none")).toHaveLength(1);
    expect(seen.state[5]).toBe("none");
    expect([seen.unit, seen.object, seen.medium]).toEqual(["Angstrom", "NeAr", "air"]);
    expect(seen.history).toContain("option range 5750 7430");
    expect(seen.history).toContain("input arc_01.fits checksum 0123456789abcdef");
    expect(seen.rms).toBeCloseTo(seen.residual, 9);
    expect(seen.offset).toBeCloseTo(-0.04, 2);
    expect(seen.n).toBe(result.lines.length);
    expect(seen.used).toBe(result.lines.filter(({ used }) => used).length);
  });

  it("comes back as it was", async () => {
    expect(await readWavelengths(path)).toEqual(result.solution);
  });

  it("is the same bytes again", () => {
    expect(encodeFits(wavelengthHdus(result, options))).toEqual(encodeFits(wavelengthHdus(result, options)));
  });

  function changed(change: (hdus: OutputHdu[]) => void): Uint8Array {
    const hdus = wavelengthHdus(result, options);
    change(hdus);
    return encodeFits(hdus) as Uint8Array;
  }

  const card = (hdus: OutputHdu[], keyword: string, value: string | number) => {
    const { header } = hdus[0] as { header: { keyword: string; value?: unknown }[] };
    header.find((one) => one.keyword === keyword)!.value = value;
  };

  it.each<[string, (hdus: OutputHdu[]) => void, string]>([
    ["a newer format", (hdus) => card(hdus, "WAVEVERS", 2), "format 2, but 1 is the newest known"],
    ["another file", (hdus) => card(hdus, "WAVEVERS", 0), "this is no file of wavelengths"],
    [
      "a strange medium",
      (hdus) => card(hdus, "WAVEMED", "water"),
      "wavelengths in water, but air or vacuum is expected",
    ],
    [
      "fibres out of order",
      (hdus) => {
        const { columns } = hdus[1] as unknown as { columns: { name: string; data: Int32Array }[] };
        columns[0].data = columns[0].data.slice().reverse() as Int32Array;
      },
      "rows must follow the slit from 1",
    ],
    [
      "half a series",
      (hdus) => {
        const { columns } = hdus[1] as unknown as { columns: { name: string; data: Float64Array }[] };
        const legendre = columns.find(({ name }) => name === "LEGENDRE")!;
        legendre.data = legendre.data.slice() as Float64Array;
        legendre.data[1] = Number.NaN;
      },
      "coefficients or sizes are missing or not finite",
    ],
  ])("refuses %s", async (_name, change, sentence) => {
    await expect(readWavelengths(changed(change), "w.fits")).rejects.toThrow(sentence);
  });
});
