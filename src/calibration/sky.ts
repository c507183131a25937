/** The sky as one spline in wavelength through all sky fibres' samples at their own wavelengths (nothing is resampled), read at
 * every fibre's wavelengths. Fibres see a line at different places between pixels, so that together they sample it finer
 * than any one of them.
 *
 * Weights come from model variances (sampleVariance.ts); knots lie close at lines and wide between them (splineKnots.ts). A sky
 * fibre that sees an object, or passes another share than measured, is found by foretelling it from the others (skyCheck.ts),
 * named, and left out. All fibres are taken to have one line width: where they have not, lines leave residuals, which the
 * check's pulls at lines show. */
import { medianOf } from "../detector/clip.js";
import { splineCovariances, splineValues } from "./bspline.js";
import { CalibrationError } from "./errors.js";
import { checkAll, checkFibre, type FibreCheck, findSkyLines, oddFibre, type SkyLinesSeen } from "./skyCheck.js";
import { type SkyInput, type SkySamples, skySamples } from "./skySamples.js";
import { fitSkySpline, type SkySpline } from "./skySpline.js";

export interface Sky {
  spline: SkySpline;
  lines: SkyLinesSeen;
  /** nFibre × nx: e⁻ per column of a fibre of throughput 1, and its variance; NaN where no sky fibre tells. */
  values: Float64Array;
  variance: Float64Array;
  /** nFibre × nx: how far a sample that the spline was made from follows its own noise in it, weight · variance of its own; 0
   * for all others. */
  ownShare: Float32Array;
  /** Each sky fibre against the sky of the others, in the order of the slit. */
  checks: FibreCheck[];
  /** Of those, the ones that see something else and were left out. */
  leftOut: FibreCheck[];
  /** Samples of the others that were passed over. */
  nClipped: number;
}

/** @throws CalibrationError when fewer than two sky fibres have light and wavelengths. */
export function fitSky(input: SkyInput, name = "the frame"): Sky {
  const { wavelengths, spectra } = input;
  const all = input.skyFibres.map((k) => skySamples(input, k)).filter(hasLight);
  if (all.length < 2) {
    throw new CalibrationError(
      `${name}: ${all.length} of its ${input.skyFibres.length} sky fibres have a spectrum with wavelengths, but a sky takes at least two; list the fibres that see only sky as 'slit.sky' in the spectrograph file, or give --sky off.`,
    );
  }
  const most = Math.floor(all.length / 2);
  const away: SkySamples[] = [];
  let kept = all;
  let found = modelOf(kept, wavelengths, spectra.nx);
  for (let odd = oddFibre(found.checks); odd !== undefined && away.length < most; odd = oddFibre(found.checks)) {
    const { fibre } = odd;
    away.push(...kept.filter((one) => one.fibre === fibre));
    kept = kept.filter((one) => one.fibre !== fibre);
    found = modelOf(kept, wavelengths, spectra.nx);
  }
  const { spline, lines, checks } = found;
  const leftOut = away.map((one) => checkFibre(one, spline.fit, lines)).sort(bySlit);
  const variance = splineCovariances(spline.fit, wavelengths, wavelengths);
  return {
    ...{ spline, lines, variance, leftOut, nClipped: spline.nClipped },
    values: splineValues(spline.fit, wavelengths),
    ownShare: ownShares(kept, spline, wavelengths.length, spectra.nx),
    checks: [...checks, ...leftOut].sort(bySlit),
  };
}

const bySlit = (a: FibreCheck, b: FibreCheck) => a.fibre - b.fibre;

function modelOf(kept: SkySamples[], wavelengths: Float64Array, nx: number) {
  const spline = fitSkySpline(kept, wavelengths, nx);
  const fibres = kept.map(({ fibre }) => fibre);
  const sigma = Math.sqrt(medianOf(kept.flatMap(({ variance }) => Array.from(variance))));
  const lines = findSkyLines(spline.fit, wavelengths, nx, fibres, sigma);
  return { spline, lines, checks: checkAll(kept, spline, lines) };
}

function ownShares(kept: SkySamples[], { used }: SkySpline, n: number, nx: number): Float32Array {
  const image = new Float32Array(n);
  kept.forEach(({ fibre, weight, variance }, k) => {
    for (let x = 0; x < nx; x++) if (used[k][x] === 1) image[fibre * nx + x] = weight[x] * variance[x];
  });
  return image;
}

function hasLight({ noise, x, throughput }: SkySamples): boolean {
  return noise.given.some((v, i) => v > 0 && Number.isFinite(x[i]) && throughput[i] > 0);
}
