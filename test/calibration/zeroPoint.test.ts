/** The movement of a simulated science frame along dispersion, against what it was made with. */
import { beforeAll, describe, expect, it } from "vitest";
import { measureWavelengths } from "../../src/calibration/arc.js";
import { lampLines } from "../../src/calibration/lamps.js";
import type { WavelengthSolution } from "../../src/calibration/wavelengths.js";
import { measureZeroPoint } from "../../src/calibration/zeroPoint.js";
import type { Spectra } from "../../src/extraction/spectra.js";
import { openStream } from "../../src/random/streams.js";
import { extractArcs } from "./arcScene.js";

let solution: WavelengthSolution;
let science: Spectra;

beforeAll(async () => {
  const { exposures, tramlines } = await extractArcs("arc_01", "sci_01");
  solution = measureWavelengths([exposures[0]], tramlines, lampLines(["Ne", "Ar"]), [5750, 7430]).solution;
  science = exposures[1].spectra;
}, 120_000);

/** The same spectra `columns` further on. */
function moved(spectra: Spectra, columns: number): Spectra {
  const roll = <T extends Float32Array | Float64Array | Int32Array>(image: T): T => {
    const out = image.slice() as T;
    for (let k = 0; k < spectra.nFibre; k++) {
      for (let x = 0; x < spectra.nx; x++) {
        out[k * spectra.nx + x] = image[k * spectra.nx + Math.min(spectra.nx - 1, Math.max(0, x - columns))];
      }
    }
    return out;
  };
  return { ...spectra, flux: roll(spectra.flux), variance: roll(spectra.variance), flags: roll(spectra.flags) };
}

describe("zero point", () => {
  it("is found from sky lines among targets with lines of their own", () => {
    const { pixels, error, nLine, warnings } = measureZeroPoint(science, solution)!;
    expect(Math.abs(pixels - 0.11)).toBeLessThan(0.01);
    expect(Math.abs(pixels - 0.11)).toBeLessThan(4 * error);
    expect(error).toBeLessThan(0.01);
    expect(nLine).toBeGreaterThanOrEqual(2);
    expect(warnings).toEqual([]);
  });

  it("is found, and warned of, two columns further on", () => {
    const { pixels, warnings } = measureZeroPoint(moved(science, -2), solution)!;
    expect(Math.abs(pixels + 1.89)).toBeLessThan(0.02);
    expect(warnings[0]).toContain("the spectrograph moved");
  });

  it("is nothing where there is no sky line", () => {
    const dice = openStream(7, "no lines");
    const flux = science.variance.map((variance) => 40 + Math.sqrt(variance) * dice.normal());
    expect(measureZeroPoint({ ...science, flux }, solution)).toBeNull();
    expect(measureZeroPoint(science, solution, [])).toBeNull();
  });
});
