/** Where a frame's light lies along dispersion against the arc's, from lines of the night sky: in every fibre the spectrum around
 * a line is put through
 *
 *     f(x) = A·G(x − x₀ − z) − B·G'(x − x₀ − z) + a + b·x + c·x²,   B = A·δz
 *
 * G the pixel-integrated Gaussian of the arc's width at x₀, where the arc has the line. The sky is the same for all fibres, so that A is
 * pooled over them, which keeps δz = Σ A·B/σ² / Σ A²/σ² unbiased in fibres in which the line drowns; fibres whose target has a line of its
 * own there stand out by A or by B, and are left out. Turns until z rests. */
import { medianOf, SIGMA_PER_MAD } from "../detector/clip.js";
import { type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { NormalEquations } from "./leastSquares.js";
import { FWHM_PER_SIGMA } from "./lineModel.js";
import { normalCumulative, normalDensity } from "./normalTable.js";
import { airToVacuum } from "./refraction.js";
import { type SkyLine, zeroPointLines } from "./skyLines.js";
import { columnAt, dispersionAt, fwhmAt, type WavelengthSolution, wavelengthAt } from "./wavelengths.js";

export interface FrameZeroPoint {
  /** Columns by which the frame's light lies higher than the arc's, and the standard error. */
  pixels: number;
  error: number;
  /** Sky lines used. */
  nLine: number;
  warnings: string[];
}

/** Pooled S/N of a line from which on it is used, and the error beyond which a zero point is none, columns. */
const leastSnr = 10;
const largestError = 0.1;
/** How far the light may have moved, columns. */
const reach = 3;
const coarseStep = 0.5;
const turns = 8;
const kappa = 4;
/** Fibres' throughputs differ by this share. */
const throughputScatter = 0.2;
const reachFwhm = 2.5;
const nTerm = 5;

interface Local {
  fibre: number;
  line: number;
  a: number;
  aVariance: number;
  b: number;
  bVariance: number;
}

/** @param skyLines in air; by default those that are fit for it within the solution's range.
 * Null when no line is strong enough: the arc's wavelengths have to be taken as they are, and the caller should say so. */
export function measureZeroPoint(
  spectra: Spectra,
  solution: WavelengthSolution,
  skyLines: readonly SkyLine[] = usualLines(solution),
): FrameZeroPoint | null {
  const lines = skyLines.map(({ wavelength }) => (solution.medium === "air" ? wavelength : airToVacuum(wavelength)));
  let z = coarseZero(spectra, solution, lines);
  let [error, nLine, last] = [Number.POSITIVE_INFINITY, 0, 0];
  for (let turn = 0; turn < turns; turn++) {
    const step = stepOf(localFits(spectra, solution, lines, z));
    if (step === null) return null;
    z += Math.max(-1, Math.min(1, step.move));
    [error, nLine, last] = [step.error, step.nLine, step.move];
    if (Math.abs(last) < 1e-4 || Math.abs(last) < 0.01 * error) break;
  }
  if (!(error < largestError) || Math.abs(last) > Math.max(0.01, error) || Math.abs(z) > reach + 1) return null;
  const far = Math.abs(z) > 1;
  return {
    ...{ pixels: z, error, nLine },
    warnings: far
      ? [
          `its sky lines lie ${z.toFixed(2)} px from where the arc has them; the spectrograph moved, take an arc nearer in time.`,
        ]
      : [],
  };
}

function usualLines(solution: WavelengthSolution): SkyLine[] {
  const { nFibre, nx } = solution;
  const known = Array.from({ length: nFibre }, (_, k) => k).filter((k) =>
    Number.isFinite(wavelengthAt(solution, k, 0)),
  );
  if (known.length === 0) return [];
  const k = known[known.length >> 1];
  const middle = (nx - 1) / 2;
  const fwhm = Math.abs(fwhmAt(solution, k, middle) * dispersionAt(solution, k, middle));
  return zeroPointLines([wavelengthAt(solution, k, 0), wavelengthAt(solution, k, nx - 1)], fwhm);
}

/** Where the pooled light of all lines is strongest, to half a column. */
function coarseZero(spectra: Spectra, solution: WavelengthSolution, lines: number[]): number {
  let [best, most] = [0, Number.NEGATIVE_INFINITY];
  for (let z = -reach; z <= reach; z += coarseStep) {
    const fits = localFits(spectra, solution, lines, z);
    const score = lines.reduce((sum, _, line) => {
      const pooled = pool(fits.filter((fit) => fit.line === line));
      return pooled === null || pooled.a < 0 ? sum : sum + (pooled.a * pooled.a) / pooled.variance;
    }, 0);
    if (score > most * (1 + 1e-9)) [best, most] = [z, score];
  }
  return best;
}

function localFits(spectra: Spectra, solution: WavelengthSolution, lines: number[], z: number): Local[] {
  return lines.flatMap((wavelength, line) =>
    Array.from({ length: spectra.nFibre }, (_, fibre) =>
      localFit(spectra, solution, fibre, line, wavelength, z),
    ).filter((fit) => fit !== null),
  );
}

function localFit(
  { flux, variance, flags, nx }: Spectra,
  solution: WavelengthSolution,
  fibre: number,
  line: number,
  wavelength: number,
  z: number,
): Local | null {
  const x0 = columnAt(solution, fibre, wavelength) + z;
  const fwhm = fwhmAt(solution, fibre, x0);
  const half = Math.ceil(reachFwhm * fwhm + 1);
  const middle = Math.round(x0);
  if (!(half > 0) || middle - half < 0 || middle + half >= nx) return null;
  const sigma = fwhm / FWHM_PER_SIGMA;
  const normal = new NormalEquations(nTerm);
  const index = [0, 1, 2, 3, 4];
  const rows: { row: number[]; y: number; weight: number }[] = [];
  for (let x = middle - half; x <= middle + half; x++) {
    const at = fibre * nx + x;
    if ((flags[at] & UNUSABLE) !== 0 || !(variance[at] > 0) || !Number.isFinite(flux[at])) continue;
    const [low, high] = [(x - 0.5 - x0) / sigma, (x + 0.5 - x0) / sigma];
    const slope = (normalDensity(low) - normalDensity(high)) / sigma;
    const u = (x - middle) / half;
    const row = [normalCumulative(high) - normalCumulative(low), slope, 1, u, u * u];
    rows.push({ row, y: flux[at], weight: 1 / variance[at] });
    normal.add(index, row, nTerm, flux[at], 1 / variance[at]);
  }
  if (rows.length < nTerm + 3) return null;
  const p = normal.solve();
  const covariance = normal.inverse();
  const chiSquare = rows.reduce(
    (sum, { row, y, weight }) => sum + weight * (y - row.reduce((light, value, i) => light + value * p[i], 0)) ** 2,
    0,
  );
  // Where a target's own features lie about, noise alone does not say how well the line is known.
  const scale = Math.max(1, chiSquare / (rows.length - nTerm));
  return { fibre, line, a: p[0], aVariance: scale * covariance[0], b: p[1], bVariance: scale * covariance[nTerm + 1] };
}

/** The light of one line in all fibres, those that stand out left out. */
function pool(fits: Local[]): { a: number; variance: number; kept: Local[] } | null {
  if (fits.length === 0) return null;
  let kept = fits;
  let a = medianOf(fits.map((fit) => fit.a));
  let variance = Number.POSITIVE_INFINITY;
  for (let round = 0; round < 4; round++) {
    const own = throughputScatter * a;
    kept = fits.filter((fit) => (fit.a - a) ** 2 <= kappa * kappa * (fit.aVariance + own * own));
    if (kept.length === 0) return null;
    const weights = kept.map((fit) => 1 / (fit.aVariance + own * own));
    const total = weights.reduce((sum, weight) => sum + weight, 0);
    a = kept.reduce((sum, fit, i) => sum + weights[i] * fit.a, 0) / total;
    variance = 1 / total;
  }
  return { a, variance, kept };
}

function stepOf(fits: Local[]): { move: number; error: number; nLine: number } | null {
  const lines = [...new Set(fits.map(({ line }) => line))];
  const points = lines.flatMap((line) => {
    const pooled = pool(fits.filter((fit) => fit.line === line));
    if (pooled === null || pooled.a < leastSnr * Math.sqrt(pooled.variance)) return [];
    return pooled.kept.map(({ b, bVariance }) => ({
      line,
      move: b / pooled.a,
      variance: bVariance / (pooled.a * pooled.a),
    }));
  });
  if (points.length === 0) return null;
  let used = points;
  let [move, scale] = [0, 1];
  for (let round = 0; round < 5; round++) {
    const total = used.reduce((sum, { variance }) => sum + 1 / variance, 0);
    move = used.reduce((sum, point) => sum + point.move / point.variance, 0) / total;
    const off = points.map((point) => Math.abs(point.move - move) / Math.sqrt(point.variance));
    scale = Math.max(1, SIGMA_PER_MAD * medianOf(off));
    used = points.filter((_, i) => off[i] <= kappa * scale);
  }
  const total = used.reduce((sum, { variance }) => sum + 1 / variance, 0);
  return { move, error: scale / Math.sqrt(total), nLine: new Set(used.map(({ line }) => line)).size };
}
