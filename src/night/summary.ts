/** What came of a night: calibrations, frames with their figures, and which of them are doubtful. The same products give the
 * same summary, whenever they were made. */
import { oneOfEach } from "../oneOfEach.js";
import type { Ending } from "./engine.js";
import type { NightPlan } from "./plan.js";
import type { Facts, Json, Task } from "./task.js";
import { frameVerdict, type Verdict } from "./verdict.js";

export interface FrameSummary {
  frame: string;
  object: string;
  /** File name; null when it was not made. */
  product: string | null;
  verdict: Verdict;
  /** Why it is not good, one sentence each, without the frame's name. */
  reasons: string[];
  exposureSeconds: number | null;
  /** Per column, over the fibres' own medians. */
  medianSignalToNoise: number | null;
  /** e⁻ per column, over all usable points. */
  medianElectrons: number | null;
  /** Of the light against the tramlines. */
  shiftPixels: number | null;
  /** Of the light along dispersion against the arc's; null when not measured. */
  zeroPointPixels: number | null;
  rejectedPixels: number | null;
  usableShare: number | null;
  /** Of sky fibres foretold by the others: light left between the sky's lines, as a share of it, and scatter over σ. */
  skyResidual: number | null;
  skyPullBetweenLines: number | null;
  skyPullAtLines: number | null;
  warnings: string[];
}

export interface ProductSummary {
  /** File name, or a folder's. */
  product: string;
  made: boolean;
  /** Why it is not there. */
  reason: string | null;
  facts: Facts;
}

export interface NightSummary {
  night: string;
  /** The program's version. */
  version: string;
  calibrations: ProductSummary[];
  frames: FrameSummary[];
  /** What was made of the spectra. */
  derived: ProductSummary[];
  /** Products that were not made. */
  nFailed: number;
  assumptions: string[];
  warnings: string[];
}

export function summariseNight(plan: NightPlan, version: string, endings: Map<Task, Ending>): NightSummary {
  const all = [...endings].filter(([, { state }]) => state !== "left");
  const frames = framesOf(all);
  const others = (part: Task["part"]) => all.filter(([task]) => task.part === part).map(productSummary);
  const facts = all.map(([, ending]) => factsOf(ending));
  const sentences = (key: "assumptions" | "warnings") =>
    oneOfEach(facts.flatMap((one) => (one[key] ?? []) as string[]));
  return {
    night: plan.name,
    version,
    calibrations: others("calibration"),
    frames: frames.map((frame) => frameSummary(frame, frames)),
    derived: others("derived"),
    nFailed: all.filter(([, ending]) => !isThere(ending)).length,
    assumptions: sentences("assumptions"),
    warnings: sentences("warnings"),
  };
}

interface FrameEnding {
  /** Its last task, and how that ended. */
  task: Task;
  ending: Ending;
  /** Of all its tasks together. */
  facts: Facts;
}

/** Object frames in the order of the plan. */
function framesOf(all: [Task, Ending][]): FrameEnding[] {
  const frames = new Map<string, FrameEnding>();
  for (const [task, ending] of all.filter(([{ part }]) => part === "frame")) {
    const before = frames.get(task.frame!)?.facts ?? {};
    const own = factsOf(ending);
    const told = ["assumptions", "warnings"].map((key) => [key, [...list(before[key]), ...list(own[key])]]);
    frames.set(task.frame!, { task, ending, facts: { ...before, ...own, ...Object.fromEntries(told) } });
  }
  return [...frames.values()];
}

function list(value: Json | undefined): string[] {
  return (value ?? []) as string[];
}

function productSummary([task, ending]: [Task, Ending]): ProductSummary {
  return { product: productOf(task), made: isThere(ending), reason: reasonOf(ending), facts: factsOf(ending) };
}

/** What a task makes, for people. */
export function productOf({ products, folder }: Task): string {
  return [...products, ...(folder === undefined ? [] : [`${folder}/`])].join(", ");
}

/** night.json. */
export function summaryText(summary: NightSummary): string {
  return `${JSON.stringify({ format: 1, ...summary }, null, 2)}\n`;
}

function isThere(ending: Ending): boolean {
  return ending.state === "made" || ending.state === "kept";
}

function factsOf(ending: Ending): Facts {
  return "record" in ending ? ending.record.facts : {};
}

/** Why a product is not there; null when it is. */
export function reasonOf(ending: Ending): string | null {
  if (ending.state === "failed") return ending.reason;
  if (ending.state !== "not made") return null;
  return `it needs ${productOf(ending.because)}, which could not be made (${ending.reason.replace(/\.$/, "")}).`;
}

function frameSummary({ task, ending, facts }: FrameEnding, all: FrameEnding[]): FrameSummary {
  const number = (key: string) => (facts[key] ?? null) as number | null;
  const failure = reasonOf(ending);
  const siblings = all.filter((one) => one.task.object === task.object).map((one) => one.facts);
  const judged = failure === null ? frameVerdict(facts, siblings) : { verdict: "failed" as const, reasons: [failure] };
  return {
    frame: task.frame!,
    object: task.object!,
    product: failure === null ? task.products[0] : null,
    ...judged,
    exposureSeconds: number("exposureSeconds"),
    medianSignalToNoise: number("medianSignalToNoise"),
    medianElectrons: number("medianElectrons"),
    shiftPixels: number("shiftPixels"),
    zeroPointPixels: number("zeroPointPixels"),
    rejectedPixels: number("rejectedPixels"),
    usableShare: number("usableShare"),
    skyResidual: number("skyResidual"),
    skyPullBetweenLines: number("skyPullBetweenLines"),
    skyPullAtLines: number("skyPullAtLines"),
    warnings: list(facts.warnings),
  };
}
