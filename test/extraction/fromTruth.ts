/** Frames and tramlines that know the truth of a simulated exposure: for tests of the extraction alone. */
import type { Frame } from "../../src/detector/frame.js";
import { Header } from "../../src/fits/header.js";
import type { SimulatedExposure } from "../../src/simulate/exposure.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";

const digest = "truth";

/** The exposure after a perfect detector correction. `readNoise`: e⁻. */
export function frameFromTruth({ name, truth }: SimulatedExposure, readNoise: number): Frame {
  const { nx, ny } = truth;
  return {
    name,
    nx,
    ny,
    electrons: truth.correctedElectrons(),
    mask: new Uint8Array(nx * ny),
    noise: { bandOfRow: new Uint8Array(ny), fixedVariance: new Float32Array(nx).fill(readNoise ** 2) },
    geometry: { axis1: nx, axis2: ny, dispersionAxis: 1, data: [], place: [], binning: [1, 1], digest },
    exposureSeconds: 900,
    header: new Header(),
    assumptions: [],
    warnings: [],
  };
}

/** The exact tramlines and, for a scene of pure Gaussians, the exact profiles. */
export function tramlinesFromTruth({ truth }: SimulatedExposure): Tramlines {
  const { nFibre, nx, ny } = truth;
  return {
    nx,
    ny,
    nFibre,
    degree: truth.traceTerms - 1,
    fibre: Int32Array.from({ length: nFibre }, (_, k) => k + 1),
    state: truth.lit.map((lit) => (lit ? "lit" : "dead")),
    block: truth.block,
    legendre: truth.traceLegendre,
    seenFrom: new Int32Array(nFibre),
    seenTo: new Int32Array(nFibre).fill(nx - 1),
    rms: new Float64Array(nFibre),
    nPoint: new Int32Array(nFibre).fill(nx),
    profile: { kind: "gaussian", sigma: truth.sigmaLegendre, widthDegree: truth.sigmaTerms - 1, relativeError: 0 },
    geometryDigest: digest,
  };
}
