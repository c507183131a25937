/** Dark positions: places on the slit that no fibre lights, in gaps and where a fibre is dead. Extracted like fibres, they must
 * hold nothing, whatever the profiles; what they are given is their neighbours' leaked light. */
import type { Frame } from "../../detector/frame.js";
import { legendreArgument, legendreValue } from "../../reference/legendre.js";
import type { FibreState, Tramlines } from "../../tramlines/tramlines.js";
import type { BackgroundFit } from "../smooth.js";
import { centres, type ZonePlan } from "./zones.js";

export interface DarkPosition {
  /** Row in the widened tramlines. */
  row: number;
  /** The lit fibres nearest on both sides, as indices into `ZonePlan.active`; −1 for none. */
  below: number;
  above: number;
  /** Positions to the nearest lit fibre: 1 beside it, 2 next but one. */
  distance: number;
  /** What it is called in reports: fibres from 1. */
  name: string;
}

export interface WidenedTramlines {
  tramlines: Tramlines;
  dark: DarkPosition[];
  /** [nActive]: rows of the lit fibres. */
  rows: number[];
}

/** The active fibres with dark positions between them, evenly spread at about the pitch, and up to two beyond each end of
 * the slit where there is room. */
export function widenTramlines({ tramlines, active, pitch, ends }: ZonePlan): WidenedTramlines {
  const middle = centres(tramlines, active, (tramlines.nx - 1) / 2);
  const last = active.length - 1;
  const made: { from: number; to: number; share: number; dark: Omit<DarkPosition, "row"> | null }[] = [];
  const fibre = (i: number) => tramlines.fibre[active[i]];
  const beyond = (i: number, inwards: number, steps: number) => {
    const gap = Math.abs(middle[i] - middle[inwards]);
    const dark = { below: i > inwards ? i : -1, above: i > inwards ? -1 : i, distance: steps };
    const name = `${steps === 1 ? "beside" : "two from"} fibre ${fibre(i)}, beyond the slit's end`;
    made.push({ from: i, to: inwards, share: (-steps * pitch) / gap, dark: { ...dark, name } });
  };
  const stepsOf = (room: number) => Math.min(Math.floor((room - 0.2 * pitch) / pitch), 2);
  if (last > 0) for (let s = stepsOf(ends[0]); s >= 1; s--) beyond(0, 1, s);
  for (let i = 0; i <= last; i++) {
    made.push({ from: i, to: i, share: 0, dark: null });
    const n = i < last ? Math.round((middle[i + 1] - middle[i]) / pitch) - 1 : 0;
    for (let j = 1; j <= n; j++) {
      const name = `between fibres ${fibre(i)} and ${fibre(i + 1)}${n > 1 ? `, ${j} of ${n}` : ""}`;
      const dark = { below: i, above: i + 1, distance: Math.min(j, n + 1 - j), name };
      made.push({ from: i, to: i + 1, share: j / (n + 1), dark });
    }
  }
  if (last > 0) for (let s = 1; s <= stepsOf(ends[1]); s++) beyond(last, last - 1, s);
  const mix = (rows: Float64Array, n: number) =>
    Float64Array.from(
      made.flatMap(({ from, to, share }) =>
        Array.from({ length: n }, (_, j) => {
          const [a, b] = [rows[active[from] * n + j], rows[active[to] * n + j]];
          return a + share * (b - a);
        }),
      ),
    );
  const of = (row: Int32Array) => Int32Array.from(made, ({ from }) => row[active[from]]);
  const { profile } = tramlines;
  // A width is not carried on beyond the slit's end: the last fibre's holds there.
  const sigma = mixInside(made, profile.sigma, profile.widthDegree + 1, active);
  const widened: Tramlines = {
    ...tramlines,
    nFibre: made.length,
    fibre: Int32Array.from(made, (_, i) => i + 1),
    state: made.map((): FibreState => "lit"),
    block: of(tramlines.block),
    legendre: mix(tramlines.legendre, tramlines.degree + 1),
    seenFrom: of(tramlines.seenFrom),
    seenTo: of(tramlines.seenTo),
    rms: Float64Array.from(made, () => Number.NaN),
    nPoint: new Int32Array(made.length),
    profile: { ...profile, sigma },
  };
  return {
    tramlines: widened,
    dark: made.flatMap(({ dark }, row) => (dark === null ? [] : [{ ...dark, row }])),
    rows: made.flatMap(({ dark }, row) => (dark === null ? [row] : [])),
  };
}

function mixInside(
  made: { from: number; to: number; share: number }[],
  rows: Float64Array,
  n: number,
  active: number[],
): Float64Array {
  const mixed = made.flatMap(({ from, to, share }) => {
    const inside = Math.min(Math.max(share, 0), 1);
    return Array.from(
      { length: n },
      (_, j) => (1 - inside) * rows[active[from] * n + j] + inside * rows[active[to] * n + j],
    );
  });
  return Float64Array.from(mixed);
}

/** The frame without its background, whose noise stays: with dark positions to extract there is no gap left to see it in. */
export function withoutBackground(frame: Frame, background: BackgroundFit | null): Frame {
  if (background === null) return frame;
  const { nx, ny, noise } = frame;
  const electrons = frame.electrons.slice();
  const fixedVarianceImage = new Float32Array(nx * ny);
  const { nX, nY, coefficients } = background;
  for (let y = 0; y < ny; y++) {
    const ty = legendreArgument(y, ny);
    const alongX = Float64Array.from({ length: nX }, (_, i) => legendreValue(coefficients, ty, i * nY, nY));
    for (let x = 0; x < nx; x++) {
      const at = y * nx + x;
      const level = legendreValue(alongX, legendreArgument(x, nx));
      const fixed = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
      electrons[at] -= level;
      fixedVarianceImage[at] = fixed + Math.max(level, 0) * (noise.inverseResponse?.[at] ?? 1);
    }
  }
  return { ...frame, electrons, noise: { ...noise, fixedVarianceImage } };
}
