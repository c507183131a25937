/** What came of a night: calibrations, frames with their figures, and which of them are doubtful. The same products give the
 * same summary, whenever they were made. */
import { basename } from "node:path";
import { oneOfEach } from "../oneOfEach.js";
import type { Ending } from "./engine.js";
import type { NightPlan } from "./plan.js";
import type { Facts, Task } from "./task.js";
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
  rejectedPixels: number | null;
  usableShare: number | null;
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
  const frames = all.filter(([task]) => task.stage === "spectra");
  const others = (wanted: boolean) =>
    all.filter(([{ stage }]) => stage !== "spectra" && DERIVED.has(stage) === wanted).map(productSummary);
  const facts = all.map(([, ending]) => factsOf(ending));
  const sentences = (key: "assumptions" | "warnings") =>
    oneOfEach(facts.flatMap((one) => (one[key] ?? []) as string[]));
  return {
    night: plan.name,
    version,
    calibrations: others(false),
    frames: frames.map(([task, ending]) => frameSummary(task, ending, facts)),
    derived: others(true),
    nFailed: all.filter(([, ending]) => !isThere(ending)).length,
    assumptions: sentences("assumptions"),
    warnings: sentences("warnings"),
  };
}

/** Stages that make products of spectra. */
const DERIVED = new Set(["tables"]);

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

function frameSummary(task: Task, ending: Ending, all: Facts[]): FrameSummary {
  const facts = factsOf(ending);
  const number = (key: string) => (facts[key] ?? null) as number | null;
  const { object } = task.options as { object: string };
  const failure = reasonOf(ending);
  const siblings = all.filter((one) => one.object === object && one.frame !== undefined);
  const judged = failure === null ? frameVerdict(facts, siblings) : { verdict: "failed" as const, reasons: [failure] };
  return {
    frame: basename(task.inputs.frame[0]),
    object,
    product: failure === null ? task.products[0] : null,
    ...judged,
    exposureSeconds: number("exposureSeconds"),
    medianSignalToNoise: number("medianSignalToNoise"),
    medianElectrons: number("medianElectrons"),
    shiftPixels: number("shiftPixels"),
    rejectedPixels: number("rejectedPixels"),
    usableShare: number("usableShare"),
    warnings: (facts.warnings ?? []) as string[],
  };
}
