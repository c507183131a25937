/** The profile model, chosen by measurement: each is fitted to some columns of the flat and judged on others.
 *
 * Held-out columns of the combined flat judge, not a second flat: two flats share each pixel's response and each fibre's
 * form, so that a model that had learned those of the columns it was fitted to would look right on the second one too.
 * All models are judged alike, with a smooth background under them and nothing but the fluxes fitted. The tracing has seen
 * all columns; its few numbers for each fibre learn nothing of a single one. */
import { medianOf } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import { TraceError } from "./errors.js";
import { type Flat, flatOf } from "./flat.js";
import { activeFibres, linesOf, profileTable } from "./profileTable.js";
import { backgroundUnder, heldOutMisfits, type Judged, judgeColumns, meanWithError } from "./shape/judge.js";
import { type MeasuredShape, measureShape } from "./shape/measure.js";
import type { Profile, ShapeProfile, Tramlines } from "./tramlines.js";

export type ProfileKind = Profile["kind"];

/** How a model fits columns that it was not made from: χ² per degree of freedom, with the error that the scatter
 * between groups of columns gives. */
export interface TriedProfile {
  kind: ProfileKind;
  misfit: number;
  error: number;
}

export interface ProfileChoice {
  tramlines: Tramlines;
  /** The models that were tried, simplest first; all of them for auto, else the one asked for. */
  tried: TriedProfile[];
}

interface Candidate {
  kind: ProfileKind;
  tramlines: Tramlines;
  /** One for each group of held-out columns. */
  misfits: Float64Array;
}

const simplestFirst: ProfileKind[] = ["gaussian", "hermite", "empirical"];
/** Gaussians stay unless another model fits better by more than so many errors of the difference; and of the two shapes the
 * freer one is taken unless the other does. A flat whose fibres are all lit alike says little about far wings, where those
 * of fixed form come out too strong: on the demo's science frame they take 8 % from fibres of 10 to 100 e⁻, splines 1 %. */
const significantErrors = 2;
/** A pixel whose noise is below this share of its light can tell of ε. */
const tellingNoise = 0.01;

/** Gives `tramlines`, traced with Gaussians, the profile of `kind`; auto: Gaussians unless a shape fits held-out columns
 * significantly better, and of the shapes the empirical one unless the Gauss–Hermite series fits them better. */
export async function chooseProfile(
  flats: Frame[] | Flat,
  tramlines: Tramlines,
  kind: ProfileKind | "auto" = "auto",
): Promise<ProfileChoice> {
  const kernels = await loadKernels();
  const flat = flatOf(flats);
  const candidates = (kind === "auto" ? simplestFirst : [kind]).flatMap((model) => {
    if (model === "gaussian") return [gaussianCandidate(kernels, flat, tramlines)];
    return candidateOrNone(kernels, flat, tramlines, model, kind === "auto");
  });
  const tried = candidates.map((model) => {
    const { mean, error } = meanWithError(model.misfits);
    return { kind: model.kind, misfit: mean, error };
  });
  return { tramlines: preferred(candidates, tried).tramlines, tried };
}

/** Gaussians where nothing fits better; else, of the shapes that tie, the freer one: what it can follow in the wings
 * decides what faint fibres beside bright ones are worth, and the tie says that its freedom costs nothing. Columns are
 * compared one by one: what is hard about a column is so for every model. */
function preferred(candidates: Candidate[], tried: TriedProfile[]): Candidate {
  let best = 0;
  tried.forEach(({ misfit }, i) => {
    if (misfit < tried[best].misfit) best = i;
  });
  const tiesWith = ({ misfits }: Candidate) => {
    const { mean, error } = meanWithError(misfits.map((misfit, i) => misfit - candidates[best].misfits[i]));
    return mean <= significantErrors * error;
  };
  const gaussian = candidates.find(({ kind }) => kind === "gaussian");
  if (gaussian !== undefined && tiesWith(gaussian)) return gaussian;
  const freest = candidates[candidates.length - 1];
  return tiesWith(freest) ? freest : candidates[best];
}

/** None when auto may do without it and the flat does not tell it. */
function candidateOrNone(
  kernels: Kernels,
  flat: Flat,
  tramlines: Tramlines,
  model: ShapeProfile["kind"],
  optional: boolean,
): Candidate[] {
  try {
    return [candidate(kernels, flat, tramlines, model)];
  } catch (error) {
    if (optional && error instanceof TraceError) return [];
    throw error;
  }
}

function gaussianCandidate(kernels: Kernels, flat: Flat, tramlines: Tramlines): Candidate {
  const lines = linesOf(tramlines, activeFibres(tramlines));
  const table = profileTable(kernels, tramlines.profile);
  const background = backgroundUnder(kernels, flat, lines, table);
  const misfits = heldOutMisfits(judgeColumns(kernels, flat, lines, table, background), lines.nFibre);
  return { kind: "gaussian", tramlines, misfits };
}

function candidate(kernels: Kernels, flat: Flat, tramlines: Tramlines, kind: ShapeProfile["kind"]): Candidate {
  const measured = measureShape(kernels, flat, tramlines, kind);
  const { lines, table, state } = measured;
  const judged = judgeColumns(kernels, flat, lines, table, state.background);
  return {
    kind,
    tramlines: withShape(tramlines, measured, relativeError(judged), kind),
    misfits: heldOutMisfits(judged, lines.nFibre),
  };
}

/** Tramlines with the measured shape; a dead fibre keeps its line, and takes the median width. */
function withShape(
  tramlines: Tramlines,
  measured: MeasuredShape,
  relativeError: number,
  kind: ShapeProfile["kind"],
): Tramlines {
  const { lines, table, known, scatter } = measured;
  const active = activeFibres(tramlines);
  const [rms, nPoint] = [tramlines.rms.slice(), tramlines.nPoint.slice()];
  const legendre = tramlines.legendre.slice();
  const sigma = new Float64Array(tramlines.nFibre * lines.nWidth);
  for (let k = 0; k < tramlines.nFibre; k++) sigma[k * lines.nWidth] = table.referenceWidth;
  active.forEach((k, i) => {
    legendre.set(lines.trace.subarray(i * lines.nTrace, (i + 1) * lines.nTrace), k * lines.nTrace);
    sigma.set(lines.width.subarray(i * lines.nWidth, (i + 1) * lines.nWidth), k * lines.nWidth);
    // A fibre too dim for the shape's own measurement keeps its first trace.
    if (scatter.nPoint[i] > 0) [rms[k], nPoint[k]] = [scatter.rms[i], scatter.nPoint[i]];
  });
  const profile: ShapeProfile = {
    kind,
    sigma,
    widthDegree: lines.nWidth - 1,
    relativeError,
    shape: table,
    known,
  };
  return { ...tramlines, legendre, rms, nPoint, profile };
}

/** ε: robust scatter of bright pixels about the model beyond what noise explains, as a share of it. The median of χ² with
 * one degree of freedom is 0.4549 (Abramowitz & Stegun, table 26.8). */
function relativeError(judged: Judged[]): number {
  const squares: number[] = [];
  const noise: number[] = [];
  for (const { residual, inverseVariance, model } of judged) {
    for (let y = 0; y < model.length; y++) {
      const variance = 1 / inverseVariance[y];
      if (!(variance < (tellingNoise * model[y]) ** 2)) continue;
      squares.push((residual[y] / model[y]) ** 2);
      noise.push(variance / (model[y] * model[y]));
    }
  }
  const excess = medianOf(squares) / 0.4549 - medianOf(noise);
  return Math.max(Math.sqrt(Math.max(excess, 0)), leastRelativeError) || leastRelativeError;
}

/** No profile is known better than this. */
const leastRelativeError = 0.002;
