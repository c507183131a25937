/** A night plan carried out in a folder: every product made once, kept while what it hangs on is unchanged. */
import { programDigest } from "./digest.js";
import { type Ending, Engine } from "./engine.js";
import { stemOf } from "./frameNames.js";
import { Ledger } from "./ledger.js";
import type { NightObject, NightPlan } from "./plan.js";
import { laterTasks, nightTasks } from "./stages.js";
import { type NightSummary, summariseNight, summaryText } from "./summary.js";
import type { Facts, Job, Task } from "./task.js";
import { watchFolder } from "./watch.js";

export interface RunOptions {
  /** The program's version, for products and summary. */
  version: string;
  /** How many products are made at once. */
  atOnce: number;
  /** Makes a job's products. @throws Error whose message is one sentence. */
  make: (job: Job) => Promise<Facts>;
  onBegin?: (tasks: readonly Task[]) => void;
  onStart?: (task: Task) => void;
  onEnd?: (task: Task, ending: Ending) => void;
  /** Take object frames as they are written to the plan's folder, until `signal` says enough. */
  watch?: boolean;
  /** What is done with other frames that come. */
  onOther?: (sentence: string) => void;
  signal?: AbortSignal;
  /** Given the folder's ledger, to close it when the process is to end at once. */
  onOpen?: (ledger: Ledger) => void;
}

export interface NightOutcome {
  summary: NightSummary;
  endings: Map<Task, Ending>;
}

/** Makes the night's products in `folder`, and night.json that sums them up.
 * @throws PlanError when the folder cannot be used; what befalls single products is told in the outcome. */
export async function runNight(plan: NightPlan, folder: string, options: RunOptions): Promise<NightOutcome> {
  const ledger = Ledger.open(folder);
  options.onOpen?.(ledger);
  try {
    const { version, atOnce, make, signal, onBegin } = options;
    const told = { onStart: options.onStart ?? (() => {}), onEnd: options.onEnd ?? (() => {}) };
    const engine = new Engine({ ledger, program: programDigest(), atOnce, make, ...told });
    const stop = () => engine.stop();
    signal?.addEventListener("abort", stop);
    const tasks = nightTasks(plan, version);
    onBegin?.(tasks);
    engine.add(tasks);
    if (options.watch === true) await watch(plan, engine, options);
    const endings = await engine.settled();
    signal?.removeEventListener("abort", stop);
    const summary = summariseNight(plan, version, endings);
    ledger.writeText("night.json", summaryText(summary));
    return { summary, endings };
  } finally {
    ledger.close();
  }
}

async function watch(plan: NightPlan, engine: Engine, { version, signal, onOther }: RunOptions): Promise<void> {
  const known = plan.objects.flatMap(({ frames }) => frames).concat(Object.values(plan.frames).flat());
  const fields = new Map(plan.objects.map((object) => [object.name, object]));
  await watchFolder(plan.folder, {
    known: [...known, ...[plan.badPixels ?? []].flat()],
    ...{ hdu: plan.hdu, signal },
    onObject: ({ path, object, name }) => {
      const field = withFrame(fields.get(object || stemOf(name)), object || stemOf(name), path, plan);
      fields.set(field.name, field);
      engine.add(laterTasks(plan, version, field), [path]);
    },
    onOther: onOther ?? (() => {}),
  });
}

/** The field with one frame more. */
function withFrame(field: NightObject | undefined, name: string, path: string, { wanted }: NightPlan): NightObject {
  const { frames, sky, combine } = field ?? { frames: [], sky: wanted.sky, combine: wanted.combine };
  return { name, frames: [...frames.filter((one) => one !== path), path], sky, combine };
}
