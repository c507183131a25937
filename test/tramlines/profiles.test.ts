/** The choice of the profile model on fibre flats of known truth. */
import { mkdtempSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { encodeFits } from "../../src/fits/encode.js";
import { legendreValue } from "../../src/reference/legendre.js";
import { nShapeTerm, shapeTerms, shapeWeights } from "../../src/reference/shape.js";
import { type SimulatedExposure, simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { readTramlines, tramlinesHdus, writeTramlines } from "../../src/tramlines/file.js";
import { chooseProfile, type ProfileChoice } from "../../src/tramlines/profiles.js";
import { fittingColumns, judgingColumns } from "../../src/tramlines/shape/columns.js";
import { meanWithError } from "../../src/tramlines/shape/judge.js";
import { traceFlat } from "../../src/tramlines/trace.js";
import type { ShapeProfile, Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth } from "../extraction/fromTruth.js";
import { fitsverify, judgeMissing } from "../judges.js";

const options = { version: "9.9.9", options: [], inputs: [] };
const smaller = (toml: string) => toml.replace("blocks = [20, 20, 20]", "blocks = [13, 12]").replace("330]", "160]");
const clean = smaller(SCENES.clean);
/** The same bench with the demo's skew and wing. */
const winged = clean
  .replace("clean = true\n", "")
  .replace(
    "own_width = 0.02",
    "own_width = 0.02\nsecond_share = 0.14\nsecond_width = 1.55\nsecond_offset = 0.22\nwing_share = 0.02\n" +
      'wing = "exponential"\nwing_scale = 4.2\nreach = 55',
  );
const layout = { blocks: [13, 12], pitch: 4.9, gap: [6], dead: [11], sky: [] };

interface Bench {
  exposure: SimulatedExposure;
  flat: Frame;
  traced: Tramlines;
  choice: ProfileChoice;
}

async function benchOf(toml: string): Promise<Bench> {
  const exposure = simulateExposure(parseScene(toml, "bench"), "fflat_01");
  const flat = frameFromTruth(exposure, 3);
  const traced = (await traceFlat([flat], layout)).tramlines;
  return { exposure, flat, traced, choice: await chooseProfile([flat], traced) };
}

let gaussian: Bench;
let skewed: Bench;
let folder: string;
beforeAll(async () => {
  folder = mkdtempSync(join(tmpdir(), "profiles-"));
  gaussian = await benchOf(clean);
  skewed = await benchOf(winged);
}, 240_000);
afterAll(() => {
  rmSync(folder, { recursive: true });
});

/** rms of weights less the truth's over the pixels within 6 px of the centre. */
function weightError({ exposure }: Bench, tramlines: Tramlines): number {
  const { truth } = exposure;
  const profile = tramlines.profile as ShapeProfile;
  let [sum, n] = [0, 0];
  for (let k = 0; k < truth.nFibre; k++) {
    if (!truth.lit[k]) continue;
    for (const x of [31, 187, 366]) {
      const t = (2 * x) / (truth.nx - 1) - 1;
      const { degree } = tramlines;
      const y = legendreValue(tramlines.legendre, t, k * (degree + 1), degree + 1);
      const width = legendreValue(profile.sigma, t, k * (profile.widthDegree + 1), profile.widthDegree + 1);
      const terms = shapeTerms(t, (2 * y) / (truth.ny - 1) - 1, width, profile.shape.referenceWidth);
      const first = Math.round(y) - 6;
      const found = shapeWeights(profile.shape, terms, y, width, first, 13);
      const expected = truth.truthProfile(k, x, first, 13);
      for (let i = 0; i < 13; i++) sum += (found[i] - expected[i]) ** 2;
      n += 13;
    }
  }
  return Math.sqrt(sum / n);
}

describe("the choice of the profile", () => {
  it("is a Gaussian where the truth is one, though a richer model could follow it", () => {
    const { choice, traced } = gaussian;
    expect(choice.tried.map(({ kind }) => kind)).toEqual(["gaussian", "hermite", "empirical"]);
    expect(choice.tramlines).toBe(traced);
    expect(Math.abs(choice.tried[0].misfit - 1)).toBeLessThan(0.15);
    expect(Math.abs(choice.tried[1].misfit - 1)).toBeLessThan(0.2);
  });

  it("is not a Gaussian where the truth has a skew and a wing, and says by how much", () => {
    const { choice } = skewed;
    expect(choice.tramlines.profile.kind).not.toBe("gaussian");
    const [first, hermite, empirical] = choice.tried;
    expect(first.misfit - first.error).toBeGreaterThan(3 * Math.max(hermite.misfit, empirical.misfit));
    for (const { misfit, error } of [hermite, empirical]) {
      expect(Math.abs(misfit - 1)).toBeLessThan(0.5);
      expect(error).toBeGreaterThan(0.005);
      expect(error).toBeLessThan(0.1);
    }
  });

  it.each(["hermite", "empirical"] as const)(
    "%s comes near the true profile, and is the model asked for",
    async (kind) => {
      const { tramlines, tried } = await chooseProfile([skewed.flat], skewed.traced, kind);
      expect(tramlines.profile.kind).toBe(kind);
      expect(tried.map((model) => model.kind)).toEqual([kind]);
      expect(weightError(skewed, tramlines)).toBeLessThan(0.0015);
      expect((tramlines.profile as ShapeProfile).known.best.length).toBe(nShapeTerm * (kind === "hermite" ? 7 : 31));
    },
  );

  it("holds judging columns out of every fit", () => {
    for (const nx of [23, 64, 161, 400, 1200, 4112]) {
      const judging = judgingColumns(nx).flat();
      expect(new Set(judging).size).toBe(judging.length);
      expect(judging.length).toBeLessThanOrEqual(nx / 4);
      if (judging.length > 0) expect(Math.max(...judging)).toBeLessThan(nx);
      for (const [n, round] of [32, 48, 96, 128].entries()) {
        const fitting = fittingColumns(nx, round, n);
        expect(fitting.filter((x) => judging.includes(x) || x < 0 || x >= nx)).toEqual([]);
        expect(fitting.length).toBe(round);
      }
    }
  });

  it("does not hang on single columns: the error is that of a mean", () => {
    const { mean, error } = meanWithError(Float64Array.of(1, 4, Number.NaN, 2, 9));
    expect(mean).toBe(4);
    // √(Σ (v − 4)² / (n (n − 1))) = √(38 / 12).
    expect(error).toBeCloseTo(1.7795130420052185, 14);
  });

  it("gives the same bytes twice", async () => {
    const bytes = (tramlines: Tramlines) => Buffer.from(encodeFits(tramlinesHdus(tramlines, options)));
    const kind = "hermite";
    const [one, two] = [0, 1].map(async () => (await chooseProfile([skewed.flat], skewed.traced, kind)).tramlines);
    expect(bytes(await one).equals(bytes(await two))).toBe(true);
  });

  it.skipIf(judgeMissing("fitsverify"))("survives its file, with which fitsverify finds no fault", async () => {
    for (const kind of ["hermite", "empirical"] as const) {
      const { tramlines } = await chooseProfile([skewed.flat], skewed.traced, kind);
      const path = join(folder, `${kind}.fits`);
      await writeTramlines(path, tramlines, options);
      expect(await readTramlines(path)).toEqual(tramlines);
      expect(fitsverify(path)).toEqual([]);
    }
  });

  it("is refused by its reader when the file's kind and coefficients disagree", async () => {
    const { tramlines } = await chooseProfile([skewed.flat], skewed.traced, "hermite");
    const profile = { ...(tramlines.profile as ShapeProfile), kind: "empirical" as const };
    await expect(
      readTramlines(encodeFits(tramlinesHdus({ ...tramlines, profile }, options)), "t.fits"),
    ).rejects.toThrow("a profile empirical of 14 columns and 49 coefficients, but 14 and 217 are expected");
  });
});
