/** Door to assembly/banded.ts: several symmetric banded systems of one shape, solved side by side in the lanes. */
import type { Kernels } from "./module.js";

export type Precision = "f32" | "f64";

export interface BandedSystem {
  /** n × (b+1): band[i·(b+1) + j] = M[i][i−j]. */
  band: Float64Array;
  /** n */
  rhs: Float64Array;
}

export interface BandedSolution {
  /** n */
  x: Float64Array;
  /** n × (b+1): the band of M⁻¹, laid out as `band`. */
  inverse: Float64Array;
}

/** Solves up to a lane count of systems (4 of f32, 2 of f64) at once.
 * @throws RangeError when there are more, or when lengths do not fit n and b. */
export function solveBandedSystems(
  kernels: Kernels,
  systems: BandedSystem[],
  n: number,
  b: number,
  precision: Precision,
): BandedSolution[] {
  const nLane = precision === "f32" ? 4 : 2;
  const nEntry = n * (b + 1);
  if (systems.length > nLane) throw new RangeError(`${systems.length} systems, but ${precision} has ${nLane} lanes.`);
  for (const { band, rhs } of systems) {
    if (band.length !== nEntry || rhs.length !== n) {
      throw new RangeError(
        `band of ${band.length} and rhs of ${rhs.length}, but n = ${n}, b = ${b} need ${nEntry} and ${n}.`,
      );
    }
  }
  const bench = kernels.workbench(16 * (2 * nEntry + n), 3);
  const numbers = (length: number) => (precision === "f32" ? bench.float32(length) : bench.float64(length));
  const [band, inverse, rhs] = [numbers(nEntry * nLane), numbers(nEntry * nLane), numbers(n * nLane)];
  systems.forEach((system, lane) => {
    for (let i = 0; i < nEntry; i++) band[i * nLane + lane] = system.band[i];
    for (let i = 0; i < n; i++) rhs[i * nLane + lane] = system.rhs[i];
  });
  const run = precision === "f32" ? bench.call.bandedSystems32 : bench.call.bandedSystems64;
  run(band.byteOffset, n, b, rhs.byteOffset, inverse.byteOffset);
  return systems.map((_, lane) => ({
    x: Float64Array.from({ length: n }, (_, i) => rhs[i * nLane + lane]),
    inverse: Float64Array.from({ length: nEntry }, (_, i) => inverse[i * nLane + lane]),
  }));
}
