/** What is told when a command cannot do its job. Bad input is met with the library's own sentence; anything else is a
 * defect of this program and says so. */
import { CalibrationError } from "../calibration/errors.js";
import { DetectorError } from "../detector/detectorError.js";
import { FitsError } from "../fits/errors.js";
import { PlanError } from "../night/plan.js";
import { SceneError } from "../simulate/sceneMessages.js";
import { SpectrographError } from "../spectrograph.js";
import { TraceError } from "../tramlines/errors.js";
import { UsageError } from "./usage.js";

/** A command's own refusals: sentences about files and results that no part of the library is concerned with. */
export class RefusalError extends Error {
  override readonly name = "RefusalError";
}

export interface Failure {
  /** usage: wrong options; input: a file or a frame will not do; defect: this program is wrong. */
  kind: "usage" | "input" | "defect";
  /** One sentence. */
  message: string;
  exitCode: 1 | 2;
}

const TOLD = [
  FitsError,
  PlanError,
  DetectorError,
  SpectrographError,
  SceneError,
  TraceError,
  CalibrationError,
  RefusalError,
];

export function failureOf(error: unknown): Failure {
  if (error instanceof UsageError) return { kind: "usage", message: error.message, exitCode: 2 };
  if (TOLD.some((known) => error instanceof known)) return input((error as Error).message);
  const { code, path, message } = error as NodeJS.ErrnoException;
  if (typeof code === "string" && typeof path === "string") {
    return input(`${path}: the system refuses it (${code}); check its name and permissions`);
  }
  if (error instanceof RangeError && /allocation failed|could not allocate|Memory\.grow/i.test(message)) {
    return input(`there is not enough memory for frames of this size (${message}); free some, or cut the frames down`);
  }
  const what = error instanceof Error ? `${error.name}: ${message}` : String(error);
  return {
    kind: "defect",
    message: `this is a defect of hatchel (${what.split("\n")[0]}); please report it, with what HATCHEL_DEBUG=1 prints.`,
    exitCode: 1,
  };
}

function input(sentence: string): Failure {
  const line = sentence.replace(/\s*\n\s*/g, " ");
  return { kind: "input", message: /[.?!]$/.test(line) ? line : `${line}.`, exitCode: 1 };
}
