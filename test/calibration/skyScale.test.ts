/** Skies whose lines change along the slit, group by group, beside skies that do not. */
import { describe, expect, it } from "vitest";
import { calibrateSpectra } from "../../src/calibration/calibrate.js";
import { SKY_GROUPS } from "../../src/calibration/skyGroups.js";
import { openStream } from "../../src/random/streams.js";
import {
  benchLine,
  benchSolution,
  benchSpectra,
  benchThroughput,
  DIGEST,
  spreadAboutZero,
  wavelengthImage,
} from "./fibreBench.js";

const shape = { nFibre: 40, nx: 512 };
const skyFibres = [2, 7, 11, 16, 20, 24, 29, 33, 38];
const solution = benchSolution(shape);
const wavelengths = wavelengthImage(solution);
const truth = benchThroughput(shape);
const relative = Float32Array.from(truth);
const throughput = {
  nFibre: 40,
  nx: 512,
  relative,
  variance: new Float32Array(relative.length),
  geometryDigest: DIGEST,
};
/** Wavelength, electrons, group. */
const LINES: [number, number, string][] = [
  [6300.304, 20000, "O I 6300"],
  [6363.776, 7000, "O I 6300"],
  [6498.729, 6000, "OH 6-1"],
  [6533.044, 8000, "OH 6-1"],
  [6553.617, 5000, "OH 6-1"],
  [6577.2, 4000, "OH 6-1"],
  [6863.955, 9000, "OH 7-2"],
  [6923.22, 9000, "OH 7-2"],
  [6949, 5000, "OH 7-2"],
];
const group = (name: string) => SKY_GROUPS.findIndex((one) => one.name === name);
const dice = openStream(77, "factors");
/** 4 % rms, about 1 in the mean over the sky fibres only roughly. */
const factors = Array.from(
  { length: 40 },
  () => new Map(SKY_GROUPS.map(({ name }) => [name, 1 + 0.04 * dice.normal()])),
);

const level = (k: number) => (skyFibres.includes(k) ? 0 : 20 + 10 * k);
const frame = (vary: boolean, seed: number, more: (wavelength: number, k: number) => number = () => 0) =>
  benchSpectra(
    shape,
    wavelengths,
    truth,
    (wavelength, k) =>
      120 +
      level(k) +
      more(wavelength, k) +
      LINES.reduce(
        (sum, [at, electrons, name]) => sum + benchLine(at, electrons * (vary ? factors[k].get(name)! : 1))(wavelength),
        0,
      ),
    { seed },
  );

const targets = Array.from({ length: 40 }, (_, k) => k).filter((k) => !skyFibres.includes(k));
const atLine = (wavelength: number) => LINES.some(([at]) => Math.abs(wavelength - at) < 5);

function pulls(vary: boolean, scaleLines: boolean, seed: number): number[] {
  const { spectra } = calibrateSpectra(frame(vary, seed), DIGEST, {
    solution,
    zeroPoint: null,
    throughput,
    skyFibres,
    scaleLines,
  });
  return targets.flatMap((k) =>
    Array.from({ length: 512 }, (_, x) => k * 512 + x)
      .filter((i) => atLine(wavelengths[i]) && Number.isFinite(spectra.flux[i]))
      .map((i) => (spectra.flux[i] - level(k)) / Math.sqrt(spectra.variance[i])),
  );
}

describe("lines scaled fibre by fibre", () => {
  it("leave what noise leaves, where a plain sky leaves the lines' change along the slit", () => {
    const plain = spreadAboutZero(pulls(true, false, 1));
    const scaled = spreadAboutZero(pulls(true, true, 1));
    expect(plain).toBeGreaterThan(1.3);
    expect(scaled).toBeLessThan(1.1);
    expect(scaled).toBeGreaterThan(0.9);
  });

  it("do no harm where nothing changes", () => {
    expect(spreadAboutZero(pulls(false, true, 2))).toBeLessThan(1.05 * spreadAboutZero(pulls(false, false, 2)));
  });

  it("take no target's line for the sky's", () => {
    const own = (wavelength: number, k: number) =>
      k === 21 ? benchLine(6534, 6000)(wavelength) + benchLine(6301.5, 9000)(wavelength) : 0;
    const scaledOf = (spectra: ReturnType<typeof frame>) =>
      calibrateSpectra(spectra, DIGEST, { solution, zeroPoint: null, throughput, skyFibres, scaleLines: true }).scaled!;
    const [without, withLine] = [scaledOf(frame(false, 3)), scaledOf(frame(false, 3, own))];
    for (const name of ["OH 6-1", "O I 6300"]) {
      const i = 21 * SKY_GROUPS.length + group(name);
      expect(Math.abs(withLine.factor[i] - without.factor[i])).toBeLessThan(0.03);
    }
  });

  it("find the factors that were put in", () => {
    const { scaled } = calibrateSpectra(frame(true, 4), DIGEST, {
      solution,
      zeroPoint: null,
      throughput,
      skyFibres,
      scaleLines: true,
    });
    const mean = (name: string) => skyFibres.reduce((sum, k) => sum + factors[k].get(name)!, 0) / skyFibres.length;
    for (const name of ["OH 6-1", "OH 7-2"]) {
      const off = targets.map((k) => {
        const i = k * SKY_GROUPS.length + group(name);
        return (scaled!.factor[i] - factors[k].get(name)! / mean(name)) / scaled!.error[i];
      });
      expect(spreadAboutZero(off)).toBeLessThan(2);
    }
    expect(scaled!.factor[group("O I 5577")]).toBe(1);
  });
});
