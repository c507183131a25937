import { describe, expect, it } from "vitest";
import { noBackground } from "../../src/extraction/background.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { loadKernels } from "../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { gaussianWeights } from "../../src/reference/profile.js";
import { measureDeadLight } from "../../src/tramlines/deadLight.js";
import { TraceError } from "../../src/tramlines/errors.js";
import { frameScene } from "../extraction/frames.js";
import type { SceneOptions } from "../scene.js";

const nFibre = 44;
const options = { refine: false, cosmicRays: false } as const;
const light = (k: number, x: number) => 300 + 2000 * Math.abs(Math.sin(1.7 * k)) + 40 * Math.sin(x / 9);

/** Science frame of fibres that shine as `flux` says; the flat had none in those of `dead`, from 0. */
function scene(dead: number[], flux: (k: number, x: number) => number, more: Partial<SceneOptions> = {}) {
  const { frame, tramlines } = frameScene({ nx: 160, ny: 235, nFibre, bow: 0.6, flux, ...more });
  for (const k of dead) tramlines.state[k] = "dead";
  return { frame, tramlines };
}

describe("light of fibres that the flat held for dead", () => {
  it("is measured to its noise, and 0 where there is none", async () => {
    const shining = 17;
    const { frame, tramlines } = scene([5, shining], (k, x) => (k === 5 ? 0 : k === shining ? 700 : light(k, x)));
    const background = { ...noBackground(), coefficients: Float64Array.of(4) };
    const found = measureDeadLight(await loadKernels(), frame, tramlines, background);
    expect(found.map(({ index, shines }) => [index, shines])).toEqual([
      [5, false],
      [shining, true],
    ]);
    // A median of 64 columns, 1.2533/8 of one column's noise: √(3.69 px · (3.1² + 4) e⁻²) = 7.1 e⁻ where it is dark (noise-
    // equivalent width 2√π·1.04 px), with 700 photons more where it shines; neighbours add some tens of per cent.
    for (const { index, flux, error } of found) {
      const alone = (1.2533 / 8) * Math.sqrt(3.69 * 13.6 + (index === shining ? 700 : 0));
      expect(error / alone).toBeGreaterThan(1);
      expect(error / alone).toBeLessThan(1.4);
      expect(Math.abs(flux - (index === shining ? 700 : 0))).toBeLessThan(4 * error);
    }
  });

  it("draws one sentence that names the fibres, and no other frame does", async () => {
    const dark = scene([5, 17], (k, x) => (k === 5 || k === 17 ? 0 : light(k, x)));
    expect((await extractFrame(dark.frame, dark.tramlines, options)).warnings.filter((w) => /dead/.test(w))).toEqual(
      [],
    );
    const lit = scene([5, 17], (k, x) => (k === 5 ? 0 : light(k, x)));
    const warnings = (await extractFrame(lit.frame, lit.tramlines, options)).warnings.filter((w) => /dead/.test(w));
    expect(warnings).toHaveLength(1);
    expect(warnings[0]).toMatch(
      /^scene\.fits: light in fibre 18 \(\d{3,4} e⁻ per column\), dead in the flat that was traced; it gets no spectrum and spoils its neighbours', so trace a flat in which it shines\.$/,
    );
  });

  it("is not seen in the wings that the model lacks, of neighbours hundreds of times brighter", async () => {
    const bright = (k: number, x: number) => (k === 16 || k === 18 ? 60_000 : k === 17 ? 0 : light(k, x));
    const { frame, tramlines } = scene([17], bright);
    tramlines.profile.relativeError = 0.02;
    // 3 % of their light again, as a Gaussian of 3.5 px.
    for (const k of [16, 18]) {
      for (let x = 0; x < frame.nx; x++) {
        const centre = legendreValue(tramlines.legendre, legendreArgument(x, frame.nx), 4 * k, 4);
        const weights = gaussianWeights(centre, 3.5, 0, frame.ny);
        for (let y = 0; y < frame.ny; y++) frame.electrons[y * frame.nx + x] += 0.03 * 60_000 * weights[y];
      }
    }
    const background = { ...noBackground(), coefficients: Float64Array.of(4) };
    const [found] = measureDeadLight(await loadKernels(), frame, tramlines, background);
    expect(found.flux).toBeGreaterThan(100); // It is there, and more than five sigma.
    expect(found.flux).toBeGreaterThan(5 * found.error);
    expect(found.shines).toBe(false);
  });

  it("is an error in over 5 % of the positions", async () => {
    const { frame, tramlines } = scene([9, 17, 31], light);
    const run = extractFrame(frame, tramlines, { ...options, checkNames: false });
    await expect(run).rejects.toThrow(TraceError);
    await expect(run).rejects.toThrow(
      /^scene\.fits: light in fibres 10, 18, 32 \(\d+, \d+, \d+ e⁻ per column\), dead in the flat that was traced; no spectrum .* trace a flat in which every lit fibre shines\.$/,
    );
  });
});
