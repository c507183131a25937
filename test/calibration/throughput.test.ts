/** Twilight with absorption lines through fibres of known throughput: what comes out against what went in. */
import { describe, expect, it } from "vitest";
import { CalibrationError } from "../../src/calibration/errors.js";
import { measureThroughput } from "../../src/calibration/throughput.js";
import { openStream } from "../../src/random/streams.js";
import { benchLine, benchSolution, benchSpectra, benchThroughput, DIGEST, wavelengthImage } from "./fibreBench.js";

const shape = { nFibre: 24, nx: 512, dead: [7] };
const dice = openStream(9, "twilight");
const dips = Array.from({ length: 25 }, () => benchLine(6250 + 700 * dice.uniform(), 6000 * dice.uniform()));
const twilight = (wavelength: number) =>
  20000 * (1 + 2e-4 * (wavelength - 6600)) - dips.reduce((sum, dip) => sum + dip(wavelength), 0);

/** Relative error of each point [fibre][x]. Truth is divided by its median over the fibres at the same wavelength, since a factor
 * of the wavelength alone cannot be told from the twilight's own colour. */
function errors(measured: Float32Array, truth: Float64Array, wavelengths: Float64Array, nx: number, rows: number[]) {
  const places = Array.from({ length: 900 }, (_, i) => 6150 + i);
  const medians = places.map((wavelength) => {
    const there = rows.map((k) => valueAt(truth, wavelengths, k, nx, wavelength)).filter(Number.isFinite);
    return there.length === rows.length ? there.sort((a, b) => a - b)[there.length >> 1] : Number.NaN;
  });
  return rows.map((k) =>
    Float64Array.from({ length: nx }, (_, x) => {
      const at = wavelengths[k * nx + x] - 6150;
      const low = Math.floor(at);
      const middle = medians[low] + (at - low) * (medians[low + 1] - medians[low]);
      return (measured[k * nx + x] * middle) / truth[k * nx + x] - 1;
    }),
  );
}

function valueAt(
  image: ArrayLike<number>,
  wavelengths: Float64Array,
  k: number,
  nx: number,
  wavelength: number,
): number {
  for (let i = k * nx; i < (k + 1) * nx - 1; i++) {
    const [here, next] = [wavelengths[i] - wavelength, wavelengths[i + 1] - wavelength];
    if (here * next <= 0) return image[i] + (here / (here - next)) * (image[i + 1] - image[i]);
  }
  return Number.NaN;
}

/** NaN at wavelengths that not all fibres see: there the median is another one. */
const known = (rows: Float64Array[]) => rows.flatMap((row) => Array.from(row)).filter((v) => !Number.isNaN(v));
const rms = (values: number[]) => Math.sqrt(values.reduce((sum, v) => sum + v * v, 0) / values.length);

describe.each([1, -1] as const)("throughput from twilight, wavelengths of sign %i", (sign) => {
  const bent = { ...shape, sign };
  const solution = benchSolution(bent);
  const wavelengths = wavelengthImage(solution);
  const truth = benchThroughput(bent);
  const lit = Array.from({ length: 24 }, (_, k) => k).filter((k) => k !== 7);

  it("is right to 0.2 % and knows its error; lines cancel", () => {
    const spectra = benchSpectra(bent, wavelengths, truth, twilight);
    const measured = measureThroughput(spectra, wavelengths, DIGEST);
    const off = errors(measured.relative, truth, wavelengths, 512, lit);
    expect(rms(known(off))).toBeLessThan(0.002);
    expect(Math.max(...known(off).map(Math.abs))).toBeLessThan(0.01);
    const pulls = off.map((row, i) =>
      row.map((v, x) => (v * measured.relative[lit[i] * 512 + x]) / Math.sqrt(measured.variance[lit[i] * 512 + x])),
    );
    expect(rms(known(pulls))).toBeGreaterThan(0.7);
    expect(rms(known(pulls))).toBeLessThan(1.7);
    expect(measured.relative.subarray(7 * 512, 8 * 512).every(Number.isNaN)).toBe(true);
  });

  it("has a median of 1 over the fibres at each wavelength, and bears with hits", () => {
    const spectra = benchSpectra(bent, wavelengths, truth, twilight);
    for (const i of [3000, 3001, 7777, 11000]) spectra.flux[i] *= 3;
    const measured = measureThroughput(spectra, wavelengths, DIGEST);
    const off = errors(measured.relative, truth, wavelengths, 512, lit);
    expect(Math.max(...known(off).map(Math.abs))).toBeLessThan(0.012);
    for (const wavelength of [6300, 6600, 6900]) {
      const values = lit.map((k) => valueAt(measured.relative, wavelengths, k, 512, wavelength)).sort((a, b) => a - b);
      expect(values[11]).toBeCloseTo(1, 3);
    }
  });
});

it("throughput of fewer than three fibres is refused", () => {
  const few = { nFibre: 4, nx: 64, dead: [0, 2] };
  const wavelengths = wavelengthImage(benchSolution(few));
  const spectra = benchSpectra(few, wavelengths, benchThroughput(few), () => 1000);
  const attempt = () => measureThroughput(spectra, wavelengths, DIGEST, "twi.fits");
  expect(attempt).toThrow(CalibrationError);
  expect(attempt).toThrow("twi.fits: only 2 of 4 fibres have both light and wavelengths");
});
