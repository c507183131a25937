/** What an extraction needs to know of the tramlines before it starts: window, bandwidth, width of a block. */
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { type BlockColumns, largestMovementPixels } from "../reference/profile.js";
import type { Tramlines } from "../tramlines/tramlines.js";

/** A Gaussian's light beyond this many σ is less than 6e-7 of it. */
const windowSigma = 5;
/** A profile with wings: further out they are taken for background. */
const shapeWindowSigma = 13;
/** Columns at which the tramlines are looked at for the plan; between them they are smooth. */
const nSample = 65;

export interface ExtractionPlan {
  /** Fibres that take part (not dead), as indices into the tramlines, low y first. */
  active: number[];
  halfWindow: number;
  bandwidth: number;
  blockColumns: BlockColumns;
  /** Smallest distance between neighbouring active fibres anywhere, pixels. */
  smallestPitch: number;
}

/** `leastReach`: pixels to either side of a tramline that must be looked at whatever the profile.
 * @throws RangeError when no fibre is lit, or when fibres are not in order of y. */
export function planExtraction(tramlines: Tramlines, leastReach = 0): ExtractionPlan {
  const active = tramlines.state.flatMap((state, k) => (state === "dead" ? [] : [k]));
  if (active.length === 0) throw new RangeError("The tramlines hold no lit fibre; there is nothing to extract.");
  const centres = sampledCentres(tramlines, active);
  const reach = tramlines.profile.kind === "gaussian" ? windowSigma : shapeWindowSigma;
  const halfWindow = Math.ceil(Math.max(reach * widestSigma(tramlines, active), leastReach) + 0.5);
  const step = (tramlines.nx - 1) / (nSample - 1);
  let steepest = 0;
  let smallestPitch = Number.POSITIVE_INFINITY;
  centres.forEach((y, k) => {
    for (let i = 1; i < nSample; i++) steepest = Math.max(steepest, Math.abs(y[i] - y[i - 1]) / step);
    if (k > 0) for (let i = 0; i < nSample; i++) smallestPitch = Math.min(smallestPitch, y[i] - centres[k - 1][i]);
  });
  if (!(smallestPitch > 0))
    throw new RangeError("Two tramlines cross; the fibres' order along y must be that of the slit.");
  return {
    active,
    halfWindow,
    bandwidth: furthestOverlap(centres, 2 * halfWindow + 2),
    blockColumns: ([16, 8] as const).find((columns) => columns * steepest <= largestMovementPixels) ?? 4,
    smallestPitch,
  };
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

function widestSigma(tramlines: Tramlines, fibres: number[]): number {
  const { sigma, widthDegree } = tramlines.profile;
  let widest = 0;
  for (const k of fibres) {
    for (const x of [0, (tramlines.nx - 1) / 2, tramlines.nx - 1]) {
      const t = legendreArgument(x, tramlines.nx);
      widest = Math.max(widest, legendreValue(sigma, t, k * (widthDegree + 1), widthDegree + 1));
    }
  }
  return widest;
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
