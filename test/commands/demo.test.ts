/** The demo: its object, its page, and its figures reckoned again from the files by another program. */
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { demoPage } from "../../src/commands/demoPage.js";
import { type JsonOf, jsonSchemas } from "../../src/commands/json.js";
import { judgeMissing, python } from "../judges.js";
import { hatchel } from "./spawned.js";

let cwd: string;
let json: JsonOf<"demo">;

beforeAll(() => {
  cwd = mkdtempSync(join(tmpdir(), "hatchel-"));
  const run = hatchel(["demo", "--json", "--quiet"], { cwd });
  if (run.code !== 0 || run.stderr !== "") throw new Error(run.stderr);
  json = jsonSchemas.demo.parse(JSON.parse(run.stdout));
}, 300_000);
afterAll(() => rmSync(cwd, { recursive: true }));

describe("the demo", () => {
  test("names 100 positions rightly, by every method extracts the frame, by one the frame that moved", () => {
    expect(json.folder).toBe("hatchel-demo");
    expect(json.tracing.fibres).toMatchObject({ positions: 100, lit: 97, deadPositions: [8, 41, 77] });
    expect(json.traceAgainstTruth.nMisnamed).toBe(0);
    expect(json.runs.map((run) => `${run.frame} ${run.method} ${run.crosstalkCorrected} ${run.shiftPixels}`)).toEqual([
      ...["sci_01 joint true 0", "sci_01 optimal false 0", "sci_01 boxcar true 0", "sci_01 boxcar false 0"],
      "sci_02 joint true 0.05",
    ]);
    expect(json.products).toEqual([
      ...["tramlines.fits", "sci_01-joint.fits", "sci_01-optimal-uncorrected.fits", "sci_01-boxcar.fits"],
      ...["sci_01-boxcar-uncorrected.fits", "sci_02-joint.fits"],
    ]);
    for (const { shiftPixels, measuredShiftPixels } of json.runs) {
      expect(Math.abs(measuredShiftPixels! - shiftPixels)).toBeLessThan(0.01);
    }
    for (const { decades } of json.runs) expect(decades.filter(({ from }) => from >= 10 && from < 1e5)).toHaveLength(4);
  });

  test("does not write over an earlier one unasked", () => {
    const product = join(cwd, "hatchel-demo/sci_01-boxcar.fits");
    const before = readFileSync(product);
    writeFileSync(product, "mine");
    const run = hatchel(["demo"], { cwd });
    expect(run).toMatchObject({ code: 1, stdout: "" });
    expect(run.stderr).toMatch(
      /^hatchel: hatchel-demo\/tramlines\.fits: this file exists already; give another name, or --force to replace it\.\n$/,
    );
    expect(readFileSync(product, "utf8")).toBe("mine");
    writeFileSync(product, before);
  });

  test.skipIf(judgeMissing("astropy"))(
    "tells the bias, pulls and leak that astropy and numpy find in its files",
    () => {
      const found = JSON.parse(python(JUDGE, [join(cwd, "hatchel-demo")])) as {
        decades: [from: number, bias: number, pull: number][];
        leak: number;
      };
      const joint = json.runs[0];
      expect(found.decades.map(([from]) => from)).toEqual([10, 100, 1000, 10000]);
      for (const [from, bias, pull] of found.decades) {
        const told = joint.decades.find((one) => one.from === from)!;
        // The files hold FLUX in single precision, as the demo's own numbers before writing may not.
        expect(Math.abs(told.bias! - bias)).toBeLessThan(1e-5);
        expect(Math.abs(told.pull! / pull - 1)).toBeLessThan(1e-3);
      }
      expect(Math.abs(joint.leak.meanShare! - found.leak)).toBeLessThan(1e-6);
    },
  );
});

const JUDGE = `
import json, sys, numpy as np
from astropy.io import fits
d = sys.argv[1]
with fits.open(d + "/sci_01-joint.fits") as s, fits.open(d + "/truth/sci_01.fits") as t:
    f, v, q = s["FLUX"].data.astype(float), s["FLUX_VAR"].data.astype(float), s["FLAGS"].data
    F, lit = t["FLUX"].data, t["FIBRES"].data["LIT"]
ok = (q < 256) & np.isfinite(f) & (v > 0) & lit[:, None]
decades = []
for lo in (10, 100, 1000, 10000):
    m = ok & (F >= lo) & (F < 10 * lo)
    pull = np.abs(f[m] - F[m]) / np.sqrt(v[m])
    decades.append([lo, np.median(f[m] / F[m]) - 1, 1.4826022185 * np.median(pull)])
near = np.maximum(np.vstack([F[1:], 0 * F[:1]]), np.vstack([0 * F[:1], F[:-1]]))
shares = []
for k in range(len(F)):
    m = ok[k] & (near[k] > 100 * F[k])
    if m.sum() >= 20: shares.append((f[k][m] - F[k][m]).sum() / near[k][m].sum())
print(json.dumps(dict(decades=decades, leak=np.mean(shares))))
`;

describe("the demo's closing words", () => {
  const closing = (change: (json: JsonOf<"demo">) => void) => {
    const copy = structuredClone(json);
    change(copy);
    const page = demoPage(copy, [["fibres", "100"]]);
    return page.slice(page.indexOf("In plain words"));
  };

  test("own up to error bars that are too small", () => {
    const words = closing((copy) => {
      for (const run of copy.runs) {
        for (const decade of run.decades) [decade.pull, decade.bias] = [1.1, 0.001];
      }
      copy.runs[0].decades.find(({ from }) => from === 100)!.pull = 3.44;
      copy.runs[4].decades.find(({ from }) => from === 10)!.bias = 0.5;
    });
    expect(words).toMatch(/error bars are not true: the scatter about the truth is 1\.1 to 3\.4 times what they say/);
    expect(words).toMatch(/On light that moved by 0\.05 px after the flat they are true within a quarter/);
    expect(words).toMatch(/check faint fibres beside bright ones before you trust them\.$/);
  });

  test("praise only what holds at every level of light", () => {
    const allTrue = (copy: JsonOf<"demo">) => {
      for (const run of copy.runs) for (const decade of run.decades) [decade.pull, decade.bias] = [1.2, 0.019];
    };
    expect(closing(allTrue)).toMatch(/error bars are true within a quarter at every level of light\./);
    expect(closing(allTrue)).not.toMatch(/not quite the light's own profile/);
    const biased = closing((copy) => {
      allTrue(copy);
      copy.runs[0].decades.find(({ from }) => from === 1e4)!.bias = -0.021;
    });
    expect(biased).toMatch(/not quite the light's own profile/);
  });
});
