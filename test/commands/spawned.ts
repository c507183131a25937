/** The built command in a process of its own, and a small night for it to work on. `npm test` builds before it runs. */
import { spawnSync } from "node:child_process";
import { existsSync, mkdtempSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";

const BIN = fileURLToPath(new URL("../../bin/hatchel.js", import.meta.url));
const BUILT = fileURLToPath(new URL("../../dist/commands/main.js", import.meta.url));

export interface Ended {
  code: number | null;
  stdout: string;
  stderr: string;
  /** Standard output as it came. */
  bytes: Buffer;
}

export function hatchel(
  args: string[],
  { cwd, input, env }: { cwd?: string; input?: Buffer; env?: object } = {},
): Ended {
  if (!existsSync(BUILT)) throw new Error("dist/ is missing; run 'npm run build' first.");
  const run = spawnSync(process.execPath, [BIN, ...args], {
    cwd,
    input,
    maxBuffer: 1 << 28,
    env: { ...process.env, HATCHEL_DEBUG: "", ...env },
  });
  if (run.error) throw run.error;
  return { code: run.status, stdout: run.stdout.toString(), stderr: run.stderr.toString(), bytes: run.stdout };
}

/** What was written to standard error, line by line. */
export function lines(text: string): string[] {
  return text.split("\n").filter((line) => line !== "");
}

/** 19 fibres, one of them dead, in three uneven blocks on 200 × 150 pixels. */
export const SMALL_SCENE = `name = "small bench"
seed = 12
[detector]
size = [200, 150]
[[detector.amplifier]]
gain = 1.3
read_noise = 3.1
overscan = 20
[slit]
blocks = [5, 8, 6]
pitch = 6.1
gap = [7, 9.5]
dead = [9]
sky = [3]
[tramlines]
tilt = 0.9
bow = 1.7
own_place = 0.04
[profile]
fwhm = 2.6
[wavelength]
range = [5500, 6500]
[light]
flat_rate = 3000
throughput_rms = 0.05
[science]
faintest = 30
brightest = 3e4
[cosmic_rays]
rate = 12
[[exposure]]
name = "bias_01"
kind = "bias"
[[exposure]]
name = "bias_02"
kind = "bias"
[[exposure]]
name = "fflat_01"
kind = "fibre-flat"
seconds = 10
[[exposure]]
name = "fflat_02"
kind = "fibre-flat"
seconds = 10
[[exposure]]
name = "arc_01"
kind = "arc"
seconds = 10
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
`;

/** A fresh folder with the scene's file and, in night/, its frames. */
export function smallNight(): string {
  const folder = mkdtempSync(join(tmpdir(), "hatchel-"));
  writeFileSync(join(folder, "scene.toml"), SMALL_SCENE);
  const run = hatchel(["simulate", "scene.toml", "-o", "night", "--quiet"], { cwd: folder });
  if (run.code !== 0 || run.stderr !== "") throw new Error(`simulating failed: ${run.stderr}`);
  return folder;
}
