/** The stages of a night, and the tasks that a plan comes to. A stage is a name, a list of tasks and a maker; makers, with all
 * that they need, are loaded by the threads that run them.
 *
 *     raw frames ─→ tramlines ─→ spectra of each object frame */
import { basename } from "node:path";
import { stemOf } from "./frameNames.js";
import type { NightPlan } from "./plan.js";
import type { Json, Maker, Task } from "./task.js";

/** By stage. */
export const MAKERS: Record<string, () => Promise<Maker>> = {
  tramlines: async () => (await import("./makeTramlines.js")).makeTramlines,
  spectra: async () => (await import("./makeSpectra.js")).makeSpectra,
  tables: async () => (await import("./makeTables.js")).makeTables,
};

/** Seconds on a small detector and one thread: only their ratios matter. */
const EFFORT = { tramlines: 2, spectra: 0.7, tables: 0.3 };

/** All tasks, each after those whose products it reads. `version`: the program's. */
export function nightTasks(plan: NightPlan, version: string): Task[] {
  const ofFrames = plan.objects.flatMap(({ name, frames }) =>
    frames.flatMap((frame) => frameTasks(plan, version, frame, name)),
  );
  return [tramlinesTask(plan, version), ...ofFrames];
}

/** Of one object frame, from its spectra on. */
export function frameTasks(plan: NightPlan, version: string, frame: string, object: string): Task[] {
  const spectra = spectraTask(plan, version, frame, object);
  return [spectra, ...tablesTasks(plan, version, spectra)];
}

function tablesTasks({ wanted }: NightPlan, version: string, { id, products: [product] }: Task): Task[] {
  if (wanted.tables === "off") return [];
  const folder = product.replace(/\.fits$/, ".tables");
  return [
    {
      ...{ id: `tables ${product}`, stage: "tables", label: `tables of ${product}` },
      ...{ inputs: {}, after: [id], products: [], folder },
      options: { version, form: wanted.tables },
      effort: EFFORT.tables,
    },
  ];
}

function tramlinesTask(plan: NightPlan, version: string): Task {
  return {
    id: "tramlines",
    stage: "tramlines",
    label: "tracing the flat",
    inputs: { ...correctionInputs(plan), flat: plan.frames.fibreFlat },
    after: [],
    products: ["tramlines.fits"],
    options: { ...common(plan, version), profile: plan.wanted.profile },
    effort: EFFORT.tramlines,
  };
}

function spectraTask(plan: NightPlan, version: string, frame: string, object: string): Task {
  const { method, crosstalk, precision, cosmicRays, refine, halfAperture, trustNames } = plan.wanted;
  const stem = stemOf(frame);
  return {
    id: `spectra ${stem}`,
    stage: "spectra",
    label: `extracting ${basename(frame)}`,
    inputs: { ...correctionInputs(plan), frame: [frame] },
    after: ["tramlines"],
    products: [`${stem}.spectra.fits`],
    options: {
      ...common(plan, version),
      object,
      ...{ method, crosstalk, precision, cosmicRays, refine, trustNames, halfAperture: halfAperture ?? null },
    },
    effort: EFFORT.spectra,
  };
}

/** What every raw frame is corrected with. */
function correctionInputs({ spectrograph, badPixels, frames }: NightPlan): Task["inputs"] {
  const { bias, dark, pixelFlat } = frames;
  const given = {
    spectrograph: [spectrograph ?? []].flat(),
    badPixels: [badPixels ?? []].flat(),
    bias,
    dark,
    pixelFlat,
  };
  return Object.fromEntries(Object.entries(given).filter(([, files]) => files.length > 0));
}

function common({ hdu }: NightPlan, version: string): { [key: string]: Json } {
  return { version, hdu: hdu ?? null };
}
