/** hatchel simulate: raw frames with known truth from a scene file. */
import { relative } from "node:path";
import type { Command } from "commander";
import { type SimulationFiles, writeSimulation } from "../simulate/files.js";
import { readScene, type Scene } from "../simulate/scene.js";
import { addCommonOptions, forceOption, outputOption } from "./frameOptions.js";
import { uninterrupted } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, textTable } from "./textTable.js";

interface SimulateOptions extends CommonOptions {
  output: string;
  force?: boolean;
}

export function addSimulate(command: Command): void {
  command
    .description("Simulates the exposures of a scene: raw frames, the truth behind them, and the spectrograph file.")
    .argument("<SCENE.toml>", "the scene")
    .addOption(outputOption("folders raw and truth", false).makeOptionMandatory())
    .addOption(forceOption());
  addCommonOptions(command).action((scene: string, options: SimulateOptions) =>
    perform("simulate", options, (progress) => simulate(scene, options, progress)),
  );
}

async function simulate(path: string, options: SimulateOptions, progress: Progress): Promise<Outcome<"simulate">> {
  const scene = readScene(path);
  const files = await simulateInto(options.output, scene, options.force === true, [path], progress);
  return {
    json: { ...simulateJson(options.output, scene, files), assumptions: [], warnings: [] },
    text: page(scene, options.output, files),
  };
}

/** Writes the scene's frames; an interrupt is heeded between two of them. */
export function simulateInto(
  folder: string,
  scene: Scene,
  force: boolean,
  inputs: string[],
  progress: Progress,
): Promise<SimulationFiles> {
  return uninterrupted((pause) =>
    writeSimulation(folder, scene, {
      force,
      inputs,
      onExposure: async (name, done, total) => {
        progress.stage(`simulating ${name}`);
        progress.share(done / total);
        await pause();
      },
    }),
  );
}

function simulateJson(folder: string, scene: Scene, files: SimulationFiles) {
  const below = (path: string) => relative(folder, path);
  return {
    scene: scene.name,
    folder,
    spectrograph: below(files.spectrograph),
    badPixels: below(files.badPixels),
    exposures: files.exposures.map(({ name, kind, raw, truth }) => ({
      name,
      kind,
      raw: below(raw),
      truth: truth === undefined ? null : below(truth),
    })),
  };
}

function page(scene: Scene, folder: string, files: SimulationFiles): string {
  const rows = files.exposures.map(({ name, kind, truth }, i) => [
    `raw/${name}.fits`,
    kind,
    `${scene.exposure[i].seconds} s`,
    truth === undefined ? "" : `truth/${name}.fits`,
  ]);
  return [
    `${scene.name}: ${counted(rows.length, "frame")} in ${folder}`,
    textTable([["frame", "kind", "exposure", "truth"], ...rows]),
    `Also there: spectrograph.toml (what an observer would know) and badmask.fits.`,
  ].join("\n");
}
