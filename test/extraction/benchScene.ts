/** A small bench with everything that makes life hard, and two fibre flats: one to make profiles of, one to inject. */
import type { Frame } from "../../src/detector/frame.js";
import { type SimulatedExposure, simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { chooseProfile } from "../../src/tramlines/profiles.js";
import { traceFlat } from "../../src/tramlines/trace.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth } from "./fromTruth.js";

/** The demo's spectrograph, smaller: three blocks, two dead fibres. */
export const BENCH = SCENES.demo
  .replace("size = [1200, 640]", "size = [400, 240]")
  .replace('"[1:600,1:640]"', '"[1:200,1:240]"')
  .replace('"[601:1200,1:640]"', '"[201:400,1:240]"')
  .replace("bad_columns = [287, 911]", "bad_columns = [87]")
  .replace("blocks = [20, 20, 20, 20, 20]", "blocks = [12, 11, 10]")
  .replace("gap = [17, 16.5, 17, 16.5]", "gap = [17, 16.5]")
  .replace("dead = [8, 41, 77]", "dead = [8, 20]")
  .replace("sky = [3, 16, 27, 38, 49, 58, 69, 83, 96]", "sky = [3]");
const LAYOUT = { blocks: [12, 11, 10], pitch: 5.1, gap: [17, 16.5], dead: [8, 20], sky: [] };

/** Pure Gaussians, and flats to trace and to inject. */
export const CLEAN = SCENES.clean
  .replace("size = [400, 330]", "size = [300, 190]")
  .replace("blocks = [20, 20, 20]", "blocks = [11, 10, 11]")
  .replace("dead = [11]", "dead = [5]")
  .replace(
    'name = "fflat_01"',
    'name = "fflat_02"\nkind = "fibre-flat"\nseconds = 13\n[[exposure]]\nname = "fflat_01"',
  );
export const readNoise = 3.1;

export function exposureOf(scene: string, name: string): SimulatedExposure {
  return simulateExposure(parseScene(scene, "bench"), name);
}

export function correctedFrame(exposure: SimulatedExposure): Frame {
  const frame = frameFromTruth(exposure, readNoise);
  const { bad } = exposure.truth;
  return { ...frame, mask: Uint8Array.from(bad) };
}

export async function gaussianLines(flat: Frame): Promise<Tramlines> {
  return (await traceFlat([flat], LAYOUT)).tramlines;
}

/** The spline profile measured on the same flat. */
export async function empiricalLines(flat: Frame): Promise<Tramlines> {
  return (await chooseProfile([flat], await gaussianLines(flat), "empirical")).tramlines;
}
