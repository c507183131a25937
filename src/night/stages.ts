/** The stages of a night, and the tasks that a plan comes to. A stage is a name, a list of tasks and a maker; makers, with all
 * that they need, are loaded by the threads that run them.
 *
 *     bias, dark, pixel flats ─→ detector.fits ─→ fibre flats ─→ tramlines.fits
 *     arcs      ─→ extracted/ ─→ wavelengths.fits ┐
 *     twilights ─→ extracted/ ─→ throughput.fits  ┤
 *     objects   ─→ extracted/ ─────────────────── ┴→ NAME.spectra.fits ─→ FIELD.combined.fits ─→ rebinned, tables
 *
 * Extraction asks for no wavelengths, so that arcs and objects are extracted side by side. */
import { basename } from "node:path";
import { fileWord, stemOf } from "./frameNames.js";
import type { NightObject, NightPlan } from "./plan.js";
import type { Json, Maker, Task } from "./task.js";

/** By stage. */
export const MAKERS: Record<string, () => Promise<Maker>> = {
  detector: async () => (await import("./makeDetector.js")).makeDetector,
  tramlines: async () => (await import("./makeTramlines.js")).makeTramlines,
  spectra: async () => (await import("./makeSpectra.js")).makeSpectra,
  wavelengths: async () => (await import("./makeWavelengths.js")).makeWavelengths,
  throughput: async () => (await import("./makeThroughput.js")).makeThroughput,
  calibrated: async () => (await import("./makeCalibrated.js")).makeCalibrated,
  combined: async () => (await import("./makeCombined.js")).makeCombined,
  rebinned: async () => (await import("./makeRebinned.js")).makeRebinned,
  tables: async () => (await import("./makeTables.js")).makeTables,
};

/** Seconds on a small detector and one thread: only their ratios matter. */
const EFFORT = {
  ...{ detector: 2, tramlines: 2, spectra: 0.7, wavelengths: 0.5, throughput: 0.3 },
  ...{ calibrated: 0.2, combined: 0.3, rebinned: 0.2, tables: 0.3 },
};

/** All tasks, each after those whose products it reads. `version`: the program's. */
export function nightTasks(plan: NightPlan, version: string): Task[] {
  const night = new NightTasks(plan, version);
  return [...night.calibrations(), ...plan.objects.flatMap((object) => night.ofObject(object))];
}

/** Of an object frame that came later, and of its field with it. */
export function laterTasks(plan: NightPlan, version: string, object: NightObject): Task[] {
  return new NightTasks(plan, version).ofObject(object);
}

class NightTasks {
  constructor(
    private readonly plan: NightPlan,
    private readonly version: string,
  ) {}

  calibrations(): Task[] {
    const { frames, wanted } = this.plan;
    const tasks = [...this.detector(), this.tramlines()];
    if (!wanted.wavelengths) return tasks;
    const arcs = frames.arc.map((path) => this.spectra(path, "arc"));
    tasks.push(...arcs, this.wavelengths(arcs));
    if (wanted.throughput === "off") return tasks;
    const even = wanted.throughput === "twilight" ? frames.twilight : frames.fibreFlat;
    const lit = even.map((path) => this.spectra(path, "even light"));
    return [...tasks, ...lit, this.throughput(lit)];
  }

  /** From the frames of one field to all that is wanted of it. */
  ofObject({ name, frames, sky, combine }: NightObject): Task[] {
    const { wanted } = this.plan;
    const tasks: Task[] = [];
    const last = frames.map((path) => {
      const spectra = this.spectra(path, "object", name);
      tasks.push(spectra);
      if (!wanted.wavelengths) return spectra;
      const calibrated = this.calibrated(spectra, sky);
      tasks.push(calibrated);
      return calibrated;
    });
    const whole = combine && last.length > 1 ? [this.combined(name, last)] : [];
    tasks.push(...whole);
    for (const one of whole.length > 0 ? whole : last) {
      const rebinned = wanted.rebin === "off" ? [] : [this.rebinned(one)];
      const tables = wanted.tables === "off" ? [] : [this.tables(rebinned[0] ?? one)];
      tasks.push(...rebinned, ...tables);
    }
    return tasks;
  }

  private detector(): Task[] {
    if (!this.hasDetector) return [];
    const { spectrograph, frames } = this.plan;
    const { bias, dark, pixelFlat } = frames;
    return [
      this.task("detector", "combining calibration frames", [], ["detector.fits"], {
        inputs: given({ spectrograph, badPixels: this.plan.badPixels, bias, dark, pixelFlat }),
      }),
    ];
  }

  private get hasDetector(): boolean {
    const { bias, dark, pixelFlat } = this.plan.frames;
    return bias.length + dark.length + pixelFlat.length > 0;
  }

  private tramlines(): Task {
    return this.task("tramlines", "tracing the flat", this.correcting(), ["tramlines.fits"], {
      inputs: { ...this.corrected(), flat: this.plan.frames.fibreFlat },
      options: { profile: this.plan.wanted.profile },
    });
  }

  private spectra(path: string, role: "arc" | "even light" | "object", object: string | null = null): Task {
    const { method, crosstalk, precision, cosmicRays, refine, halfAperture, trustNames, wavelengths } =
      this.plan.wanted;
    const stem = stemOf(path);
    const own = { method, crosstalk, cosmicRays, refine, halfAperture: halfAperture ?? null };
    const plain = { method: "joint", crosstalk: true, cosmicRays: true, refine: true, halfAperture: null };
    const product = role === "object" && !wavelengths ? `${stem}.spectra.fits` : `extracted/${stem}.fits`;
    return this.task("spectra", `extracting ${basename(path)}`, [...this.correcting(), "tramlines"], [product], {
      id: `extracted ${stem}`,
      inputs: { ...this.corrected(), frame: [path] },
      options: { role, precision, trustNames, ...(role === "arc" ? plain : own) },
      ...(object === null ? {} : { part: "frame", frame: basename(path), object }),
    });
  }

  private wavelengths(arcs: Task[]): Task {
    const { spectrograph, known } = this.plan;
    return this.task("wavelengths", "measuring wavelengths", ["tramlines", ...ids(arcs)], ["wavelengths.fits"], {
      inputs: given({ spectrograph, lines: known?.wavelength?.lines }),
    });
  }

  private throughput(lit: Task[]): Task {
    return this.task("throughput", "measuring throughput", ["wavelengths", ...ids(lit)], ["throughput.fits"], {
      options: { from: this.plan.wanted.throughput },
    });
  }

  private calibrated(spectra: Task, sky: Json): Task {
    const { wanted, spectrograph } = this.plan;
    const stem = stemOf(spectra.frame!);
    const after = ["wavelengths", ...(wanted.throughput === "off" ? [] : ["throughput"]), spectra.id];
    return this.task("calibrated", `calibrating ${stem}`, after, [`${stem}.spectra.fits`], {
      id: `spectra ${stem}`,
      inputs: given({ spectrograph }),
      options: { sky },
      ...{ part: "frame", frame: spectra.frame!, object: spectra.object! },
    });
  }

  private combined(name: string, frames: Task[]): Task {
    const word = fileWord(name);
    return this.task("combined", `combining ${name}`, [], [`${word}.combined.fits`], {
      ...{ id: `combined ${word}`, some: ids(frames), least: 2, part: "derived", object: name },
      options: { cosmicRays: this.plan.wanted.cosmicRays, products: frames.flatMap(({ products }) => products) },
      effort: EFFORT.combined * frames.length,
    });
  }

  private rebinned({ id, products: [product] }: Task): Task {
    const { rebin, rebinStep, rebinRange } = this.plan.wanted;
    const name = product.replace(/\.fits$/, `.${rebin}.fits`);
    return this.task("rebinned", `rebinning ${product}`, [id], [name], {
      ...{ id: name, part: "derived" },
      options: { grid: rebin, step: rebinStep ?? null, range: rebinRange ?? null },
    });
  }

  private tables({ id, products: [product] }: Task): Task {
    return this.task("tables", `writing tables of ${product}`, [id], [], {
      ...{ id: `tables ${product}`, part: "derived", folder: product.replace(/\.fits$/, ".tables") },
      options: { form: this.plan.wanted.tables },
    });
  }

  /** What every raw frame is corrected with: the detector's calibrations, and what they do not hold. */
  private corrected(): Task["inputs"] {
    const { spectrograph, badPixels } = this.plan;
    return given(this.hasDetector ? { spectrograph } : { spectrograph, badPixels });
  }

  private correcting(): string[] {
    return this.hasDetector ? ["detector"] : [];
  }

  private task(
    stage: keyof typeof EFFORT,
    label: string,
    after: string[],
    products: string[],
    { options, ...more }: Partial<Omit<Task, "options">> & { options?: { [key: string]: Json } },
  ): Task {
    const common = { version: this.version, hdu: this.plan.hdu ?? null };
    const task: Task = {
      ...{ id: stage, stage, label, after, products, inputs: {}, part: "calibration", effort: EFFORT[stage] },
      options: { ...common, ...options },
    };
    return { ...task, ...more };
  }
}

function ids(tasks: Task[]): string[] {
  return tasks.map(({ id }) => id);
}

/** Roles that have files. */
function given(files: Record<string, string | string[] | undefined>): Task["inputs"] {
  const lists = Object.entries(files).map(([role, paths]) => [role, [paths ?? []].flat()] as const);
  return Object.fromEntries(lists.filter(([, paths]) => paths.length > 0));
}
