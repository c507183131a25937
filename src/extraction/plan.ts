/** What an extraction needs to know of the tramlines before it starts: window, bandwidth, width of a block. */
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { type BlockColumns, largestMovement } from "../reference/profile.js";
import type { Tramlines } from "../tramlines/tramlines.js";

/** Light within this many σ is weighed. Of a Gaussian 2e-6 of it lie further out, and are neglected. */
const windowSigma = 4.75;
/** The same for a profile with wings, whose light further out is known and taken off. */
const coreSigma = 4.25;
/** How far out: beyond, the wings are taken for background. */
const wingSigma = 13;
/** Columns at which the tramlines are looked at for the plan; between them they are smooth. */
const nSample = 65;

export interface ExtractionPlan {
  /** Fibres that take part (not dead), as indices into the tramlines, low y first. */
  active: number[];
  halfWindow: number;
  /** Rows to either side of the window on which the light of the wings is known; a multiple of 4. */
  wing: number;
  bandwidth: number;
  blockColumns: BlockColumns;
  /** Smallest distance between neighbouring active fibres anywhere, pixels. */
  smallestPitch: number;
  /** Largest σ of an active fibre, pixels. */
  widestSigma: number;
}

/** `leastReach`: pixels to either side of a tramline that must be looked at whatever the profile.
 * @throws RangeError when no fibre is lit, or when fibres are not in order of y. */
export function planExtraction(tramlines: Tramlines, leastReach = 0): ExtractionPlan {
  const active = tramlines.state.flatMap((state, k) => (state === "dead" ? [] : [k]));
  if (active.length === 0) throw new RangeError("The tramlines hold no lit fibre; there is nothing to extract.");
  const centres = sampledCentres(tramlines, active);
  const step = (tramlines.nx - 1) / (nSample - 1);
  let steepest = 0;
  let smallestPitch = Number.POSITIVE_INFINITY;
  centres.forEach((y, k) => {
    for (let i = 1; i < nSample; i++) steepest = Math.max(steepest, Math.abs(y[i] - y[i - 1]) / step);
    if (k > 0) for (let i = 0; i < nSample; i++) smallestPitch = Math.min(smallestPitch, y[i] - centres[k - 1][i]);
  });
  if (!(smallestPitch > 0))
    throw new RangeError("Two tramlines cross; the fibres' order along y must be that of the slit.");
  const { narrowest, widest } = sigmaRange(tramlines, active);
  const blockColumns = blockOf(steepest, narrowest);
  const strays = (blockColumns * steepest) / 2;
  const gaussian = tramlines.profile.kind === "gaussian";
  const core = Math.ceil((gaussian ? windowSigma : coreSigma) * widest + strays);
  const halfWindow = Math.max(core, Math.ceil(leastReach + 0.5), 2);
  const wing = gaussian ? 0 : 4 * Math.ceil(Math.max(wingSigma * widest - halfWindow, 0) / 4);
  return {
    active,
    halfWindow,
    wing,
    bandwidth: furthestOverlap(centres, 2 * halfWindow + 2),
    blockColumns,
    smallestPitch,
    widestSigma: widest,
  };
}

/** The plan with each profile in one window as wide as it is known: for columns looked at one by one, where time is no matter. */
export function widened(plan: ExtractionPlan, tramlines: Tramlines): ExtractionPlan {
  const halfWindow = plan.halfWindow + plan.wing;
  const bandwidth = furthestOverlap(sampledCentres(tramlines, plan.active), 2 * halfWindow + 2);
  return { ...plan, halfWindow, wing: 0, bandwidth };
}

/** y of each fibre at nSample columns. */
function sampledCentres(tramlines: Tramlines, fibres: number[]): Float64Array[] {
  const nCoef = tramlines.degree + 1;
  return fibres.map((k) =>
    Float64Array.from({ length: nSample }, (_, i) =>
      legendreValue(tramlines.legendre, (2 * i) / (nSample - 1) - 1, k * nCoef, nCoef),
    ),
  );
}

/** Smallest and largest σ of the fibres, pixels. */
function sigmaRange(tramlines: Tramlines, fibres: number[]): { narrowest: number; widest: number } {
  const { sigma, widthDegree } = tramlines.profile;
  let [narrowest, widest] = [Number.POSITIVE_INFINITY, 0];
  for (const k of fibres) {
    for (const x of [0, (tramlines.nx - 1) / 2, tramlines.nx - 1]) {
      const t = legendreArgument(x, tramlines.nx);
      const here = legendreValue(sigma, t, k * (widthDegree + 1), widthDegree + 1);
      narrowest = Math.min(narrowest, here);
      widest = Math.max(widest, here);
    }
  }
  return { narrowest, widest };
}

/** The most columns over which interpolated profiles are good enough. `steepest`: pixels that a line climbs in a column. */
function blockOf(steepest: number, sigma: number): BlockColumns {
  return ([64, 32, 16, 8] as const).find((n) => n * steepest <= largestMovement(sigma)) ?? 4;
}

/** How many fibres further the last one stands whose window can still meet a fibre's own. */
function furthestOverlap(centres: Float64Array[], reach: number): number {
  let bandwidth = 0;
  for (let k = 0; k < centres.length; k++) {
    while (k + bandwidth + 1 < centres.length && meets(centres[k], centres[k + bandwidth + 1], reach)) bandwidth++;
  }
  return bandwidth;
}

function meets(lower: Float64Array, upper: Float64Array, reach: number): boolean {
  return lower.some((y, i) => upper[i] - y < reach);
}
