/** One step of a night: files in, products out, and all that decides about their bytes. */

/** Plain data. */
export type Json = null | boolean | number | string | Json[] | { [key: string]: Json };

export interface Task {
  /** Unique; also the name of its record. */
  id: string;
  /** Who makes it: a name in stages.ts. */
  stage: string;
  /** What is being done, for people: "extracting sci_01.fits". */
  label: string;
  /** Files that are read, absolute paths, by what they are to the stage. */
  inputs: Record<string, string[]>;
  /** Tasks whose products are read. */
  after: string[];
  /** The same of tasks of which some may fail: what there is is read, `least` of them at least (one, if nothing is said). */
  some?: string[];
  least?: number;
  /** Names of the files that it makes, below the run's folder. */
  products: string[];
  /** Name of a folder of its own, where the number of files shows only when they are made. */
  folder?: string;
  /** All else that changes the products. */
  options: Json;
  /** Where the summary tells of it: among calibrations, object frames, or what is made of their spectra. */
  part: "calibration" | "frame" | "derived";
  /** File name of the object frame, and its field. */
  frame?: string;
  object?: string;
  /** Rough share of the work, for order and for the time that is left. */
  effort: number;
}

/** What a maker tells of its products, for summaries: plain data, the same for the same inputs. */
export type Facts = { [key: string]: Json };

/** A task as it is given to a maker. */
export interface Job {
  stage: string;
  inputs: Record<string, { path: string; digest: string }[]>;
  /** Products of the tasks before, by file name. */
  from: Record<string, { path: string; digest: string }>;
  /** Absolute paths to write to; nothing is there yet. */
  products: string[];
  /** The same for a folder of files; it is there, and empty. */
  folder?: string;
  options: Json;
}

export type Maker = (job: Job) => Promise<Facts>;
