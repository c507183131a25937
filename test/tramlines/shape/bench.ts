/** A small bench with a profile that is no Gaussian (skewed core, wings, scattered light), and two fibre flats of it. Invented. */
import type { Frame } from "../../../src/detector/frame.js";
import type { Kernels } from "../../../src/kernels/module.js";
import { columnProfiles } from "../../../src/reference/shapeProfiles.js";
import { type SimulatedExposure, simulateExposure, type Truth } from "../../../src/simulate/exposure.js";
import { parseScene, type Scene } from "../../../src/simulate/scene.js";
import { SCENES } from "../../../src/simulate/scenes.js";
import { combineFlats } from "../../../src/tramlines/flat.js";
import { type MeasuredShape, measureShape } from "../../../src/tramlines/shape/measure.js";
import type { Tramlines } from "../../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "../../extraction/fromTruth.js";

export const readNoise = 3.1;

/** 29 fibres in three blocks, the eighth dead, on 300 × 200 pixels; few cosmic rays. `change`: other lines of the scene. */
export function benchScene(change: (text: string) => string = (text) => text): Scene {
  return parseScene(change(BENCH), "bench");
}

const BENCH = SCENES.demo
  .replace("size = [1200, 640]", "size = [300, 200]")
  .replace('"[1:600,1:640]"', '"[1:150,1:200]"')
  .replace('"[601:1200,1:640]"', '"[151:300,1:200]"')
  .replace("bad_columns = [287, 911]", "bad_columns = []")
  .replace("blocks = [20, 20, 20, 20, 20]", "blocks = [10, 10, 9]")
  .replace("gap = [17, 16.5, 17, 16.5]", "gap = [12, 12.5]")
  .replace("dead = [8, 41, 77]", "dead = [8]")
  .replace("sky = [3, 16, 27, 38, 49, 58, 69, 83, 96]", "sky = [3]")
  .replace("rate = 180", "rate = 14");

export function frameOf(exposure: SimulatedExposure): Frame {
  return frameFromTruth(exposure, readNoise);
}

export interface MeasuredBench {
  scene: Scene;
  flats: SimulatedExposure[];
  /** The true lines with Gaussians of the core's width. */
  tramlines: Tramlines;
  measured: MeasuredShape;
  /** Fibres with light. */
  active: number[];
}

/** A profile measured on the bench's own two flats, starting from Gaussians. */
export function measuredBench(kernels: Kernels, scene = benchScene()): MeasuredBench {
  const flats = ["fflat_01", "fflat_02"].map((name) => simulateExposure(scene, name));
  const tramlines = tramlinesFromTruth(flats[0]);
  const measured = measureShape(kernels, combineFlats(flats.map(frameOf)), tramlines);
  return { scene, flats, tramlines, measured, active: tramlines.state.flatMap((s, k) => (s === "dead" ? [] : [k])) };
}

export interface WeightErrors {
  /** Pixels within 4.5 px of the centre, and those beyond, to 14 px. */
  core: { rms: number; worst: number };
  wing: { rms: number; worst: number };
  /** Mean error of a whole wing, one side, 4.5 to 14 px. */
  wingLight: number;
}

/** Measured weights less the true ones, in every seventh column. */
export function weightErrors(
  { lines, table }: Pick<MeasuredShape, "lines" | "table">,
  truth: Truth,
  active: number[],
): WeightErrors {
  const core: number[] = [];
  const wing: number[] = [];
  for (let x = 3; x < truth.nx; x += 7) {
    const { first, n, centre, weights } = columnProfiles(lines, table, x, 14);
    active.forEach((k, i) => {
      truth.truthProfile(k, x, first[i], n).forEach((wanted, j) => {
        (Math.abs(first[i] + j - centre[i]) < 4.5 ? core : wing).push(weights[i * n + j] - wanted);
      });
    });
  }
  const rowsOfWing = wing.length / (2 * active.length * Math.ceil((truth.nx - 3) / 7));
  return {
    core: scatter(core),
    wing: scatter(wing),
    wingLight: (wing.reduce((sum, error) => sum + error, 0) / wing.length) * rowsOfWing,
  };
}

function scatter(errors: number[]): { rms: number; worst: number } {
  const squares = errors.reduce((sum, error) => sum + error * error, 0);
  const worst = errors.reduce((most, error) => Math.max(most, Math.abs(error)), 0);
  return { rms: Math.sqrt(squares / errors.length), worst };
}
