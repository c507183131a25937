/** The commands there are, in the order of the help. A command's module, and all that it needs, is loaded when it is asked
 * for: a job waits for its own parts only. */
import type { Command } from "commander";
import type { CommandName } from "./json.js";

export interface Entry {
  name: CommandName;
  /** What it takes, as the list of commands shows it. */
  takes: string;
  summary: string;
  /** Whether it has the kernels work on frames as soon as its options are sound. */
  works?: boolean;
  /** Puts description, arguments, options and action to the command. */
  define: (command: Command) => Promise<void>;
}

export const contents: Entry[] = [
  {
    name: "demo",
    takes: "[DIR]",
    summary: "simulated frames to spectra to comparison with the truth",
    define: async (command) => (await import("./demo.js")).addDemo(command),
  },
  {
    name: "simulate",
    takes: "<SCENE.toml>",
    summary: "simulate raw frames with known truth",
    define: async (command) => (await import("./simulate.js")).addSimulate(command),
  },
  {
    name: "plan",
    takes: "<FOLDER>",
    summary: "propose a night plan from a folder's frames",
    define: async (command) => (await import("./plan.js")).addPlan(command),
  },
  {
    name: "run",
    takes: "<PLAN.toml>",
    summary: "carry out a night plan",
    define: async (command) => (await import("./run.js")).addRun(command),
  },
  {
    name: "look",
    takes: "<FRAME>",
    summary: "what is in a frame, and what would be assumed of it",
    define: async (command) => (await import("./look.js")).addLook(command),
  },
  {
    name: "stack",
    takes: "",
    summary: "one file of detector calibrations from bias, dark and pixel flat frames",
    define: async (command) => (await import("./stack.js")).addStack(command),
  },
  {
    name: "trace",
    works: true,
    takes: "<FLAT...>",
    summary: "find, name and trace the fibres of a flat",
    define: async (command) => (await import("./trace.js")).addTrace(command),
  },
  {
    name: "throughput",
    takes: "<FRAME...>",
    summary: "what each fibre passes on, from twilight or fibre flats",
    define: async (command) => (await import("./throughput.js")).addThroughput(command),
  },
  {
    name: "extract",
    works: true,
    takes: "<FRAME>",
    summary: "one spectrum per fibre from a frame",
    define: async (command) => (await import("./extract.js")).addExtract(command),
  },
  {
    name: "arc",
    takes: "<ARC...>",
    summary: "the wavelength of every column of every fibre, from arcs",
    define: async (command) => (await import("./arc.js")).addArc(command),
  },
  {
    name: "compare",
    works: true,
    takes: "<FRAME>",
    summary: "the methods side by side on a frame",
    define: async (command) => (await import("./compare.js")).addCompare(command),
  },
  {
    name: "verify",
    works: true,
    takes: "<FRAME>",
    summary: "check the kernels against their reference on a frame",
    define: async (command) => (await import("./verify.js")).addVerify(command),
  },
  {
    name: "recover",
    works: true,
    takes: "<FRAME>",
    summary: "can the extraction of a frame be trusted",
    define: async (command) => (await import("./recover.js")).addRecover(command),
  },
  {
    name: "combine",
    takes: "<SPECTRA...>",
    summary: "frames of one field to one set of spectra",
    define: async (command) => (await import("./combine.js")).addCombine(command),
  },
  {
    name: "rebin",
    takes: "<SPECTRA>",
    summary: "spectra on a common wavelength grid",
    define: async (command) => (await import("./rebin.js")).addRebin(command),
  },
  {
    name: "tables",
    takes: "<SPECTRA>",
    summary: "one table per fibre or target, as ECSV or FITS",
    define: async (command) => (await import("./tables.js")).addTables(command),
  },
];
