/** A small simulated night on disk, and frames with headers of one's own. */
import { mkdtempSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import type { Card, CardValue } from "../../src/fits/header.js";
import { writeFits } from "../../src/fits/write.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { writeExposure, writeObserverFiles, writeSimulation } from "../../src/simulate/files.js";
import { parseScene, type Scene } from "../../src/simulate/scene.js";
import { SMALL_SCENE } from "../commands/spawned.js";

/** Every kind of frame; two fields. */
export const NIGHT_SCENE = `${SMALL_SCENE.replace('kind = "science"\nseconds = 900', 'kind = "science"\nseconds = 900\nobject = "north field"')}
[[exposure]]
name = "sci_02"
kind = "science"
seconds = 900
object = "north field"
shift = 0.06
[[exposure]]
name = "sci_03"
kind = "science"
seconds = 600
object = "south, crowded"
[[exposure]]
name = "dark_01"
kind = "dark"
seconds = 900
[[exposure]]
name = "dflat_01"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "dflat_02"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "twi_01"
kind = "twilight"
seconds = 5
`;

export const nightScene = (): Scene => parseScene(NIGHT_SCENE, "night.toml");

export function freshFolder(): string {
  return mkdtempSync(join(tmpdir(), "hatchel-night-"));
}

/** A folder with raw/, truth/, spectrograph.toml and badmask.fits; `only`: these exposures. */
export async function writeNight(only?: readonly string[]): Promise<string> {
  const folder = freshFolder();
  const scene = nightScene();
  if (only === undefined) await writeSimulation(folder, scene);
  else {
    await writeObserverFiles(folder, scene);
    for (const name of only) await writeExposure(folder, simulateExposure(scene, name));
  }
  return folder;
}

/** A frame of 8 × 6 pixels whose header has these cards. */
export async function writeFrame(path: string, cards: Record<string, CardValue>, nx = 8): Promise<void> {
  const header: Card[] = Object.entries({ GAIN: 1.2, RDNOISE: 3, ...cards }).map(([keyword, value]) => ({
    keyword,
    value,
    comment: "",
  }));
  const image = { nx, ny: 6, data: new Float32Array(6 * nx) };
  await writeFits(path, [{ kind: "primary", header, image }]);
}

/** A plan in `folder` of `writeNight`. */
export function writePlan(folder: string, text: string): string {
  const path = join(folder, "night.toml");
  writeFileSync(path, text);
  return path;
}
