/** combine as a command, on files, and what is in the product. */
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { jsonSchemas } from "../../src/commands/json.js";
import { readImage } from "../../src/fits/image.js";
import { readTable } from "../../src/fits/table.js";
import { kill, productBytes } from "../calibration/products.js";
import { frameOf } from "../calibration/stacks.js";
import { fitsverify, judgeMissing } from "../judges.js";
import { hatchel } from "./spawned.js";

let cwd: string;
const size: [number, number] = [12, 160];
const wavelengths = Float64Array.from(
  { length: 12 * 160 },
  (_, i) => 5000 + 1.2 * (i % 160) + 0.1 * Math.floor(i / 160),
);
const light = (k: number, x: number) => 100 * (k + 1) * (1 + 0.2 * Math.sin(x / 9));
const hits: [number, number, number][] = [
  [3, 40, 5000],
  [7, 90, 20000],
];

beforeAll(() => {
  cwd = mkdtempSync(join(tmpdir(), "hatchel-combine-"));
  const put = (name: string, truth: Parameters<typeof frameOf>[3], object = "field 3") => {
    const { spectra } = frameOf(size, light, name, truth);
    kill(spectra, 5);
    const cards = [
      { keyword: "OBJECT", value: object, comment: "" },
      { keyword: "EXPTIME", value: truth?.seconds ?? 600, comment: "s" },
      { keyword: "NREJECT", value: 12, comment: "" },
    ];
    const targets = [{ name: "M 1", fibres: [1, 2, 6] }];
    writeFileSync(join(cwd, `${name}.fits`), productBytes({ spectra, wavelengths, cards, targets }));
  };
  put("a", {});
  put("b", { scale: 0.5, seconds: 600, hits });
  put("c", { scale: 2, seconds: 1200 });
  put("other", { light: (k, x) => light((5 * k + 7) % 12, x) }, "field 9");
  writeFileSync(join(cwd, "s.toml"), "[slit.targets]\nN = [3, 4]\n");
});
afterAll(() => rmSync(cwd, { recursive: true }));

describe("combine", () => {
  test("tells each frame's part, and writes the whole", async () => {
    const run = hatchel(["combine", "a.fits", "b.fits", "c.fits", "-o", "all.fits", "--json"], { cwd });
    expect(run.code, run.stderr).toBe(0);
    const json = jsonSchemas.combine.parse(JSON.parse(run.stdout));
    expect(json.reference).toBe("a.fits");
    [1, 0.5, 2].forEach((scale, i) => {
      expect(Math.abs(json.frames[i].scale - scale)).toBeLessThan(4 * json.frames[i].error! + 1e-9);
    });
    expect(json.rejectedValues).toBeGreaterThanOrEqual(2);
    expect(json.rejectedValues).toBeLessThan(5);
    expect(json.frames.map(({ weight }) => weight).reduce((a, b) => a + b, 0)).toBeCloseTo(1, 9);
    // Photons rule: weights as the light, 1 : 0.5 : 2.
    expect(json.frames[2].weight).toBeCloseTo(2 / 3.5, 1);
    expect(json.warnings).toEqual(
      ["b.fits: 50 % of the usual light per second; cloud, or a telescope off its field?"].filter(
        () => json.warnings.length > 0,
      ),
    );
    expect(json.assumptions).toEqual([expect.stringMatching(/no sky that was taken off/)]);
    const product = await readProduct(join(cwd, "all.fits"));
    const nFrames = await readImage(join(cwd, "all.fits"), { hdu: "NFRAMES" });
    expect([
      nFrames.bitpix,
      nFrames.data[3 * 160 + 40],
      nFrames.data[7 * 160 + 90],
      nFrames.data[100],
      nFrames.data[5 * 160],
    ]).toEqual([...[16, 2, 2, 3, 0]]);
    expect(product.spectra.flux[5 * 160 + 9]).toBeNaN();
    expect(product.wavelengths!.image).toEqual(wavelengths);
    const frames = await readTable(join(cwd, "all.fits"), "FRAMES");
    const column = (name: string) => frames.columns.find((one) => one.name === name)!.data;
    expect(column("NAME")).toEqual(["a.fits", "b.fits", "c.fits"]);
    expect(Array.from(column("SCALE") as Float64Array)).toEqual(json.frames.map(({ scale }) => scale));
    expect(Array.from(column("EXPTIME") as Float64Array)).toEqual([600, 600, 1200]);
    const { primaryHeader } = product;
    expect([primaryHeader.get("NCOMBINE"), primaryHeader.get("EXPTOTAL"), primaryHeader.get("EXPTIME")]).toEqual([
      3, 2400, 600,
    ]);
    expect(primaryHeader.has("NREJECT")).toBe(false);
    expect(product.targets).toEqual([{ target: { name: "M 1", fibres: [1, 2, 6] }, neglected: 0.0125 }]);
    const { flux } = product.spectra;
    const sums = await readTable(join(cwd, "all.fits"), "TARGETS", { columns: ["FLUX", "NFIBRE"] });
    // Fibre 6 is dead.
    expect((sums.columns[0].data as Float32Array)[20]).toBeCloseTo(flux[20] + flux[160 + 20], 2);
    expect((sums.columns[1].data as Int32Array)[0]).toBe(2);
    if (!judgeMissing("fitsverify")) expect(fitsverify(join(cwd, "all.fits"))).toEqual([]);
    const again = hatchel(["combine", "a.fits", "b.fits", "c.fits", "-o", "again.fits", "--quiet"], { cwd });
    expect(again.code).toBe(0);
    expect(readFileSync(join(cwd, "again.fits")).equals(readFileSync(join(cwd, "all.fits")))).toBe(true);
  });

  test("says the same for people, with the targets of a spectrograph file, and goes on to rebin", () => {
    const run = hatchel(["combine", "a.fits", "c.fits", "-o", "two.fits", "--spectrograph", "s.toml"], { cwd });
    expect(run.stdout).toMatch(/^two\.fits: 2 frames on the exposure of a\.fits\n/);
    expect(run.stdout).toMatch(/^ {2}c\.fits +(1\.9|2\.0)\d+ +0\.0\d+ /m);
    expect(run.stdout).toMatch(/^ {2}target N +2 fibres, median S\/N \d+\.\d$/m);
    const rebin = hatchel(["rebin", "two.fits", "-o", "grid.fits"], { cwd });
    expect(rebin.code, rebin.stderr).toBe(0);
    const refused = hatchel(["combine", "grid.fits", "grid.fits", "-o", "none.fits"], { cwd });
    expect(refused.stderr).toBe(
      "hatchel: grid.fits: these spectra were rebinned; combine the spectra that they were made from, and rebin the result.\n",
    );
  });

  test("refuses what is no stack of one field", () => {
    const run = (args: string[]) => hatchel(["combine", ...args, "-o", "none.fits"], { cwd });
    expect(run(["a.fits", "b.fits", "c.fits", "other.fits"])).toMatchObject({
      code: 1,
      stderr: expect.stringMatching(
        /^hatchel: other\.fits: the fibres' light scatters by \d+ % against the other frames, /,
      ),
    });
    expect(run(["a.fits", "a.fits"]).stderr).toBe(
      "hatchel: a.fits: it holds the same spectra as a.fits; give each exposure once, or it would count twice.\n",
    );
    expect(run(["a.fits"]).stderr).toBe("hatchel: One file of spectra was given; give two or more to combine.\n");
    expect(run(["a.fits", "-"])).toMatchObject({
      code: 2,
      stderr: "hatchel combine: - is standard input, which holds one file; name the files.\n",
    });
    expect(run(["a.fits", "gone.fits"]).stderr).toBe("hatchel: gone.fits: there is no such file; check the name.\n");
  });
});
