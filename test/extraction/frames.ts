/** A frame and its exact tramlines made of the extraction's small scene. Invented data. */
import type { Frame } from "../../src/detector/frame.js";
import { Header } from "../../src/fits/header.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { defaults, makeScene, type SceneOptions } from "../scene.js";

export interface FrameScene {
  frame: Frame;
  tramlines: Tramlines;
  /** nFibre × nx, e⁻. */
  flux: Float64Array;
}

/** `dead`: fibres, from 0, that hold no light and that the tramlines call dead. */
export function frameScene(change: Partial<SceneOptions> = {}, dead: number[] = []): FrameScene {
  const lit = change.flux ?? defaults.flux;
  const { input, flux } = makeScene({ ...change, flux: (k, x) => (dead.includes(k) ? 0 : lit(k, x)) });
  const { nx, ny, nFibre } = input;
  const frame: Frame = {
    name: "scene.fits",
    nx,
    ny,
    electrons: input.electrons,
    mask: input.mask,
    noise: input.noise,
    geometry: { axis1: nx, axis2: ny, dispersionAxis: 1, data: [], place: [], binning: [1, 1], digest: "scene" },
    exposureSeconds: 60,
    header: new Header(),
    assumptions: [],
    warnings: [],
  };
  const tramlines: Tramlines = {
    nx,
    ny,
    nFibre,
    degree: 3,
    fibre: Int32Array.from({ length: nFibre }, (_, k) => k + 1),
    state: Array.from({ length: nFibre }, (_, k) => (dead.includes(k) ? "dead" : "lit")),
    block: new Int32Array(nFibre).fill(1),
    legendre: input.trace,
    seenFrom: new Int32Array(nFibre),
    seenTo: new Int32Array(nFibre).fill(nx - 1),
    rms: new Float64Array(nFibre),
    nPoint: new Int32Array(nFibre).fill(nx),
    profile: { kind: "gaussian", sigma: input.width, widthDegree: 1, relativeError: 0.01 },
    geometryDigest: "scene",
  };
  return { frame, tramlines, flux };
}
