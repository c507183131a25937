/** Cosmic rays by a second frame of the same field: light that one frame holds and the other does not, even where it
 * mimics a profile.
 *
 *     expected = Σ s_k f_k P_k + s·(second frame − its own model)        e⁻, background apart
 *
 * f_k are the second frame's spectra, P_k the profiles where the first frame's light sits, so that a shift between the two
 * moves the light and nothing else; what the profile model misses is in the second frame's residuals too and cancels.
 * s_k(x) scales each fibre smoothly, since seeing and clouds change. A pixel is hit when its excess is beyond κ·σ with
 *
 *     σ² = v + s²·v₂ + (ε·light nearby)² + (η·change of the spectrum along x)²
 *
 * v and v₂ from the models. ε and η are measured on the pair, on what lies *below* expectation, where no cosmic ray can be: ε is
 * what profiles still differ by, η by how much spectral lines may differ (focus, a shift along x, another seeing). */
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import { MaskBit } from "../reference/bits.js";
import type { Column } from "../reference/column.js";
import { reachOn } from "../reference/cosmic.js";
import { pixelVariance } from "../reference/variance.js";
import { checkGeometry } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import { type Extraction, extractFrame } from "./extract.js";
import { type ColumnSource, lightOf, profileColumns } from "./modelColumn.js";
import type { ExtractionOptions } from "./options.js";
import { isOtherField, type PairSpectra, pairSpectra } from "./pairSpectra.js";

/** σ beyond which a pixel is hit, and those beside it. */
const kappa = 5;
const growKappa = 2.5;
/** Only pixels whose noise is below this share of the light nearby tell of ε. */
const tellingNoise = 0.02;
/** The second frame's own hits make shortfalls too, on up to 1 % of the pixels; the margin is for what lies beyond. */
const tellingQuantile = 0.98;
const margin = 3;

export interface PairHits {
  /** ny × nx of the first frame: MaskBit.cosmic where it was hit. */
  hits: Uint8Array;
  nPixel: number;
  /** Median of s over fibres and columns. */
  scale: number;
  /** ε and η. */
  profileError: number;
  lineError: number;
  warnings: string[];
}

/** Hits of `frame` that `pair`, of the same field and readout window, does not have.
 * @throws RangeError as `extractFrame`. */
export async function findPairHits(
  frame: Frame,
  pair: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions = {},
): Promise<PairHits> {
  checkGeometry(frame, tramlines);
  checkGeometry(pair, tramlines);
  const { knownHits: _known, onProgress: _silent, ...rest } = options;
  const joint = { ...rest, method: "joint", cosmicRays: true } as const;
  const [first, second] = [await extractAdapted(frame, tramlines, joint), await extractAdapted(pair, tramlines, joint)];
  const spectra = pairSpectra(first.spectra, second.spectra, first.plan.active);
  const found: PairHits = {
    hits: new Uint8Array(frame.nx * frame.ny),
    nPixel: 0,
    scale: spectra.medianScale,
    profileError: 0,
    lineError: spectra.lineError,
    warnings: [],
  };
  if (isOtherField(spectra)) {
    found.warnings.push(
      `${pair.name}: its spectra are not those of ${frame.name} at any scale, so it tells nothing of cosmic rays; give a second frame of the same field.`,
    );
    return found;
  }
  const difference = pairDifference(frame, pair, first, second, spectra);
  found.profileError = measureProfileError(difference);
  markHits(found.hits, significance(difference, found.profileError), frame.nx, frame.ny);
  found.nPixel = found.hits.reduce((n, bits) => n + (bits ? 1 : 0), 0);
  return found;
}

/** Extracted on tramlines of its own, which the input of the fit then holds. */
async function extractAdapted(frame: Frame, tramlines: Tramlines, options: ExtractionOptions): Promise<Extraction> {
  const adapted = adaptTramlines(await loadKernels(), frame, tramlines, options).tramlines;
  return extractFrame(frame, adapted, { ...options, shift: false, refine: false });
}

/** What every pixel holds over expectation, with its noise and what else it may be: images [ny × nx]; NaN where nothing
 * can be said. */
interface Difference {
  excess: Float32Array;
  /** e⁻² */
  variance: Float32Array;
  /** e⁻: light nearby. */
  reach: Float32Array;
  /** e⁻²: (η · change of the spectra along x)². */
  lineSlack: Float32Array;
}

function pairDifference(
  frame: Frame,
  pair: Frame,
  first: Extraction,
  second: Extraction,
  spectra: PairSpectra,
): Difference {
  const { nx, ny } = frame;
  const image = () => new Float32Array(nx * ny).fill(Number.NaN);
  const difference: Difference = { excess: image(), variance: image(), reach: image(), lineSlack: image() };
  const [here, there] = [first, second].map(({ fit }): ColumnSource => profileColumns(fit.input, fit.background));
  for (let x = 0; x < nx; x++) {
    const expected = expectColumn(here(x), there(x), pair, second, spectra, x);
    for (let y = 0; y < ny; y++) {
      const at = y * nx + x;
      if (frame.mask[at] !== 0) continue;
      const row = expected.column.margin + y;
      const under = expected.column.background[row];
      difference.excess[at] = frame.electrons[at] - under - expected.light[row];
      difference.variance[at] =
        expected.variance[row] + pixelVariance(expected.column.noise, row, expected.fibres[row] + under);
      difference.reach[at] = expected.reach[row];
      difference.lineSlack[at] = expected.lineSlack[row];
    }
  }
  return difference;
}

/** Rows of one column of the first frame as the second frame has them expected. */
interface Expected {
  column: Column;
  /** e⁻, background apart: with and without the second frame's residuals. */
  light: Float64Array;
  fibres: Float64Array;
  /** e⁻²: what the second frame brings. */
  variance: Float64Array;
  reach: Float64Array;
  lineSlack: Float64Array;
}

function expectColumn(
  here: Column,
  there: Column,
  pair: Frame,
  second: Extraction,
  spectra: PairSpectra,
  x: number,
): Expected {
  const { nx } = pair;
  const at = (image: ArrayLike<number>) => Float64Array.from({ length: here.nFibre }, (_, k) => image[k * nx + x]);
  const [flux, scaled] = [at(spectra.second), at(spectra.scaled)];
  const fibres = lightOf(here, scaled);
  const before = lightOf(there, flux);
  const sizes = [scaled, flux].map((one) => lightOf(here, one.map(Math.abs)));
  const change = at(spectra.change).map((value) => value * spectra.lineError);
  const expected: Expected = {
    column: here,
    light: fibres.slice(),
    fibres,
    variance: new Float64Array(here.nRow),
    reach: lightInReach(here, fibres, scaled),
    lineSlack: squared(lightOf(here, change)),
  };
  const fluxVariance = squaredWeights(here, at(spectra.scaledVariance));
  for (let y = 0; y < pair.ny; y++) {
    const [row, pixel] = [here.margin + y, y * nx + x];
    if (pair.mask[pixel] !== 0 || (second.rejected[pixel] & (MaskBit.cosmic | MaskBit.grown)) !== 0) {
      expected.variance[row] = fluxVariance[row];
      continue;
    }
    const scale = sizes[1][row] > 0 ? sizes[0][row] / sizes[1][row] : spectra.medianScale;
    const under = there.background[there.margin + y];
    const own = before[there.margin + y];
    expected.light[row] += scale * (pair.electrons[pixel] - under - own);
    expected.variance[row] = scale * scale * pixelVariance(there.noise, there.margin + y, own + under);
  }
  return expected;
}

/** Light nearby that a misfit of the profiles is a share of: [nRow], e⁻. */
function lightInReach(column: Column, light: Float64Array, flux: Float64Array): Float64Array {
  const reach = new Float64Array(column.nRow);
  const all = { model: light, wings: new Float64Array(column.nRow) };
  for (let row = column.margin; row < column.nRow - column.margin; row++) reach[row] = reachOn(column, all, flux, row);
  return reach;
}

/** Σ P_k² · variance_k on every row: e⁻². */
function squaredWeights(column: Column, variance: Float64Array): Float64Array {
  const sum = new Float64Array(column.nRow);
  for (let k = 0; k < column.nFibre; k++) {
    const first = column.margin + column.start[k];
    for (let i = 0; i < column.nWindow; i++) {
      const weight = column.weights[k * column.nWindow + i];
      sum[first + i] += weight * weight * variance[k];
    }
  }
  return sum;
}

function squared(values: Float64Array): Float64Array {
  return values.map((value) => value * value);
}

/** ε that covers all but a few of the shortfalls: what lies below expectation is no cosmic ray of the first frame. */
function measureProfileError({ excess, variance, reach, lineSlack }: Difference): number {
  const shares: number[] = [];
  for (let i = 0; i < excess.length; i++) {
    if (!(excess[i] < 0) || !(variance[i] < (tellingNoise * reach[i]) ** 2)) continue;
    const beyond = excess[i] * excess[i] - kappa * kappa * (variance[i] + lineSlack[i]);
    shares.push(beyond > 0 ? Math.sqrt(beyond) / reach[i] : 0);
  }
  if (shares.length < 100) return 0;
  const sorted = Float64Array.from(shares).sort();
  return (margin * sorted[Math.floor(tellingQuantile * (sorted.length - 1))]) / kappa;
}

/** Excess over noise, squared; 0 where there is none, NaN where nothing can be said: [ny × nx]. */
function significance({ excess, variance, reach, lineSlack }: Difference, profileError: number): Float32Array {
  return excess.map((light, i) => {
    const slack = profileError * reach[i];
    return light > 0 ? (light * light) / (variance[i] + lineSlack[i] + slack * slack) : light * 0;
  });
}

/** Pixels beyond κ, and those beyond the lower threshold that border on one. */
function markHits(hits: Uint8Array, excess: Float32Array, nx: number, ny: number): void {
  for (let i = 0; i < hits.length; i++) if (excess[i] > kappa * kappa) hits[i] = MaskBit.cosmic;
  const cores = hits.slice();
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) {
      if (cores[y * nx + x] === 0) continue;
      for (let v = Math.max(y - 1, 0); v <= Math.min(y + 1, ny - 1); v++) {
        for (let u = Math.max(x - 1, 0); u <= Math.min(x + 1, nx - 1); u++) {
          if (excess[v * nx + u] > growKappa * growKappa) hits[v * nx + u] = MaskBit.cosmic;
        }
      }
    }
  }
}
