/** hatchel demo: simulated frames to spectra, and the spectra against the truth behind the frames. */
import { basename, join } from "node:path";
import type { Command } from "commander";
import { adaptTramlines } from "../extraction/adapt.js";
import { extractFrame } from "../extraction/extract.js";
import { writeSpectra } from "../extraction/file.js";
import type { Adapted } from "../extraction/options.js";
import { readImage } from "../fits/image.js";
import { readTable } from "../fits/table.js";
import { refuseToHarm } from "../fits/write.js";
import { loadKernels } from "../kernels/module.js";
import type { Method } from "../reference/extract.js";
import { tramlineHeights } from "../report/summary.js";
import { type CosmicTruth, scoreByDecade, scoreCosmicRays, scoreLeak, scoreTrace } from "../report/truth.js";
import { type SimulationFiles, simulationFiles } from "../simulate/files.js";
import { parseScene, type Scene } from "../simulate/scene.js";
import { SCENES } from "../simulate/scenes.js";
import { writeTramlines } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { demoPage } from "./demoPage.js";
import { addCommonOptions, forceOption, methodLines } from "./frameOptions.js";
import { type Bench, frameLines, oneOfEach, openBench, readFrame, traceFlats } from "./frames.js";
import type { JsonOf } from "./json.js";
import { uninterrupted } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { simulateInto } from "./simulate.js";
import { tracingFacts, tracingJson } from "./trace.js";
import { version } from "./version.js";

type DemoJson = JsonOf<"demo">;

interface DemoOptions extends CommonOptions {
  force?: boolean;
}

interface Run {
  /** Which of the scene's science frames. */
  science: number;
  method: Method;
  crosstalk: boolean;
}

/** The frame that lies as the flat does by every method, the one that has moved since by the first. Optimal extraction
 * with its cross-talk corrected is joint extraction by another road, so it is shown without. */
const RUNS: Run[] = [
  { science: 0, method: "joint", crosstalk: true },
  { science: 0, method: "optimal", crosstalk: false },
  { science: 0, method: "boxcar", crosstalk: true },
  { science: 0, method: "boxcar", crosstalk: false },
  { science: 1, method: "joint", crosstalk: true },
];

/** How many times brighter a neighbour must be for its leak to be looked at. */
const CONTRAST = 100;

export function addDemo(command: Command): void {
  command
    .description(
      "Simulates a night on a bench spectrograph with 100 crowded fibres, extracts it, and compares the spectra with the truth.",
    )
    .argument("[DIR]", "folder for frames and products", "hatchel-demo")
    .addOption(forceOption());
  addCommonOptions(command).action((folder: string, options: DemoOptions) =>
    perform("demo", options, (progress) => demo(folder, options.force === true, progress)),
  );
}

/** What the steps share. */
interface Night {
  folder: string;
  force: boolean;
  scene: Scene;
  files: SimulationFiles;
  progress: Progress;
}

async function demo(folder: string, force: boolean, progress: Progress): Promise<Outcome<"demo">> {
  const scene = parseScene(SCENES.demo, "the demo scene");
  const night: Night = { folder, force, scene, files: simulationFiles(folder, scene), progress };
  for (const path of products(night)) refuseToHarm(path, { force });
  await simulateInto(folder, scene, force, [], progress);
  const [flat, ...moreFlats] = ofKind(night, "fibre-flat");
  const flats = [flat, ...moreFlats].map(({ raw }) => raw);
  const bench = await openNight(night, flats);
  const traced = await traceFlats(flats, bench, progress);
  const history = { version, options: frameLines({ ...bench.options, flat: flats }), inputs: bench.inputs };
  await uninterrupted(() => writeTramlines(products(night)[0], traced.tramlines, history, { force }));
  const runs: DemoJson["runs"] = [];
  const adapted = new Map<string, Adapted>();
  for (const run of RUNS) {
    runs.push(await extractAndScore(run, night, bench, traced.tramlines, history.options, adapted));
  }
  const [trueTrace, lit] = [await truthImage(flat.truth!, "TRACE"), await litFibres(flat.truth!)];
  const json: DemoJson = {
    folder,
    products: products(night).map((path) => basename(path)),
    tracing: tracingJson(traced.tracing!),
    traceAgainstTruth: scoreTrace(tramlineHeights(traced.tramlines), trueTrace, lit, scene.slit.pitch),
    runs,
    assumptions: oneOfEach(traced.assumptions),
    warnings: oneOfEach(traced.warnings),
  };
  return { json, text: demoPage(json, tracingFacts(traced.tracing!)) };
}

function ofKind({ files }: Night, kind: string) {
  return files.exposures.filter((exposure) => exposure.kind === kind);
}

/** Tramlines first, then the spectra of each run. */
function products(night: Night): string[] {
  return [join(night.folder, "tramlines.fits"), ...RUNS.map((run) => spectraFile(run, night))];
}

function spectraFile({ science, method, crosstalk }: Run, night: Night): string {
  const { name } = ofKind(night, "science")[science];
  return join(night.folder, `${name}-${method}${crosstalk ? "" : "-uncorrected"}.fits`);
}

/** With what an observer would have: everything but the truth. */
function openNight(night: Night, flats: string[]): Promise<Bench> {
  const raw = (kind: string) => ofKind(night, kind).map((exposure) => exposure.raw);
  const { spectrograph } = night.files;
  const options = { spectrograph, bias: raw("bias"), pixelFlat: raw("detector-flat") };
  return openBench([spectrograph, ...options.bias, ...options.pixelFlat, ...flats], options, night.progress);
}

/** `adapted`: what was measured of each frame, once for all its runs. */
async function extractAndScore(
  run: Run,
  night: Night,
  bench: Bench,
  tramlines: Tramlines,
  benchLines: string[],
  adapted: Map<string, Adapted>,
): Promise<DemoJson["runs"][number]> {
  const { method, crosstalk } = run;
  const { raw, truth, name } = ofKind(night, "science")[run.science];
  const ownBench = { ...bench, inputs: [...bench.inputs] };
  const frame = await readFrame(raw, "science", ownBench);
  night.progress.stage(`extracting ${name}, ${method}`);
  const options = { method, crosstalk, precision: "f64", cosmicRays: true, refine: true } as const;
  const own = adapted.get(name) ?? adaptTramlines(await loadKernels(), frame, tramlines, options);
  adapted.set(name, own);
  const extraction = await extractFrame(frame, tramlines, {
    ...options,
    adapted: own,
    onProgress: night.progress.share,
  });
  const sky = bench.spectrograph?.slit?.sky;
  const history = {
    ...{ version, options: [...methodLines(options), ...benchLines], sky },
    inputs: ownBench.inputs,
  };
  await uninterrupted(() =>
    writeSpectra(spectraFile(run, night), extraction, frame, tramlines, history, { force: night.force }),
  );
  const known = await readTruth(truth!, night.scene);
  return {
    frame: name,
    method,
    crosstalkCorrected: extraction.spectra.crosstalkCorrected,
    shiftPixels: night.scene.exposure.find((exposure) => exposure.name === name)!.shift,
    measuredShiftPixels: extraction.shift?.coefficients[0] ?? null,
    decades: scoreByDecade(extraction.spectra, known),
    leak: scoreLeak(extraction.spectra, known, CONTRAST),
    cosmicRays: scoreCosmicRays(extraction.spectra, known),
  };
}

async function readTruth(path: string, { detector }: Scene): Promise<CosmicTruth> {
  const cosmicRays = await readImage(path, { hdu: "COSMIC" });
  return {
    flux: await truthImage(path, "FLUX"),
    lit: await litFibres(path),
    ny: cosmicRays.ny,
    cosmicRays: cosmicRays.data,
    trace: await truthImage(path, "TRACE"),
    readNoise: Math.max(...detector.amplifier.map((amplifier) => amplifier.read_noise)),
  };
}

async function truthImage(path: string, hdu: string): Promise<Float32Array | Float64Array> {
  return (await readImage(path, { hdu })).data;
}

async function litFibres(path: string): Promise<boolean[]> {
  const { columns } = await readTable(path, "FIBRES", { columns: ["LIT"] });
  return (columns[0].data as (boolean | null)[]).map((lit) => lit === true);
}
