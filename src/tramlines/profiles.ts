/** The profile model, chosen by measurement: each is fitted to some columns of the flat and judged on others. */
import { medianOf } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import type { ShapeTable } from "../reference/shape.js";
import { combineFlats, type Flat } from "./flat.js";
import { activeFibres, linesOf, profileTable } from "./profileTable.js";
import type { Lines } from "./shape/column.js";
import { flatColumn, type MeasuredShape, measureShape } from "./shape/measure.js";
import { backgroundColumn, nBackground, settleColumn, wholeProfiles } from "./shape/step.js";
import type { Profile, ShapeProfile, Tramlines } from "./tramlines.js";

export type ProfileKind = Profile["kind"];

export interface ProfileChoice {
  tramlines: Tramlines;
  /** How each model that was tried fits columns that it was not made from, best first. */
  tried: { kind: ProfileKind; misfit: number }[];
}

/** Columns that judge; those that fit stand elsewhere. */
const judgingColumns = 24;
/** A pixel whose noise is below this share of its light can tell of ε. */
const tellingNoise = 0.01;

/** Gives `tramlines`, traced with Gaussians, the profile of `kind`; auto: the one that fits held-out columns best. */
export async function chooseProfile(
  flats: Frame[],
  tramlines: Tramlines,
  kind: ProfileKind | "auto" = "auto",
): Promise<ProfileChoice> {
  if (kind === "gaussian") return { tramlines, tried: [] };
  const kernels = await loadKernels();
  const flat = combineFlats(flats);
  const measured = measureShape(kernels, flat, tramlines);
  const empirical = withShape(tramlines, measured, flat);
  const tried = [
    { kind: "empirical" as const, tramlines: empirical, misfit: misfitOf(kernels, flat, empirical) },
    { kind: "gaussian" as const, tramlines, misfit: misfitOf(kernels, flat, tramlines) },
  ];
  tried.sort((a, b) => a.misfit - b.misfit);
  const best = kind === "auto" ? tried[0] : tried.find((model) => model.kind === kind)!;
  return { tramlines: best.tramlines, tried: tried.map(({ kind, misfit }) => ({ kind, misfit })) };
}

/** Tramlines with the measured shape; a dead fibre keeps its line, and takes the median width. */
function withShape(tramlines: Tramlines, measured: MeasuredShape, flat: Flat): Tramlines {
  const { lines, table, known } = measured;
  const active = activeFibres(tramlines);
  const legendre = tramlines.legendre.slice();
  const sigma = new Float64Array(tramlines.nFibre * lines.nWidth);
  for (let k = 0; k < tramlines.nFibre; k++) sigma[k * lines.nWidth] = table.referenceWidth;
  active.forEach((k, i) => {
    legendre.set(lines.trace.subarray(i * lines.nTrace, (i + 1) * lines.nTrace), k * lines.nTrace);
    sigma.set(lines.width.subarray(i * lines.nWidth, (i + 1) * lines.nWidth), k * lines.nWidth);
  });
  const profile: ShapeProfile = {
    kind: "empirical",
    sigma,
    widthDegree: lines.nWidth - 1,
    relativeError: relativeError(measured, flat),
    shape: table,
    known,
  };
  return { ...tramlines, legendre, profile };
}

interface Residuals {
  residual: Float64Array;
  inverseVariance: Float64Array;
  model: Float64Array;
}

/** Residuals of the judging columns when only the fluxes are fitted. */
function* judge(flat: Flat, lines: Lines, table: ShapeTable, background: Float64Array): Generator<Residuals> {
  for (let i = 0; i < judgingColumns; i++) {
    const data = flatColumn(flat, Math.floor(((i + 0.93) * flat.nx) / judgingColumns) - 1);
    const profiles = wholeProfiles(lines, table, data.x);
    const under = backgroundColumn(background, data.x, lines);
    const level = data.light.map((light, y) => light - under[y]);
    const { model } = settleColumn(profiles, data, level, under);
    yield { residual: level.map((light, y) => light - model[y]), inverseVariance: data.inverseVariance, model };
  }
}

/** Median of squared residuals over their variance, over that of a perfect model (the median of χ² with one degree of
 * freedom, 0.4549: Abramowitz & Stegun, table 26.8). */
function misfitOf(kernels: Kernels, flat: Flat, tramlines: Tramlines): number {
  const lines = linesOf(tramlines, activeFibres(tramlines));
  const squared: number[] = [];
  const table = profileTable(kernels, tramlines.profile);
  for (const { residual, inverseVariance } of judge(flat, lines, table, new Float64Array(nBackground))) {
    for (let y = 0; y < flat.ny; y++) {
      if (inverseVariance[y] > 0) squared.push(residual[y] * residual[y] * inverseVariance[y]);
    }
  }
  return medianOf(squared) / 0.4549;
}

/** ε: robust scatter of bright pixels about the model beyond what noise explains, as a share of it. */
function relativeError(measured: MeasuredShape, flat: Flat): number {
  const squares: number[] = [];
  const noise: number[] = [];
  for (const { residual, inverseVariance, model } of judge(
    flat,
    measured.lines,
    measured.table,
    measured.state.background,
  )) {
    for (let y = 0; y < flat.ny; y++) {
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
