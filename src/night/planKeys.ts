/** Every key of the night plan: what it may hold, what that means, and what holds when it is left out. */
import { z } from "zod";
import type { TomlKeys } from "../tomlSentences.js";

const name = z.string().min(1);
const files = z.array(name).min(1);
const sky = z.enum(["on", "off", "scaled"]);

export const planSchema = z.strictObject({
  name: name.optional(),
  folder: name.optional(),
  spectrograph: name.optional(),
  bad_pixels: name.optional(),
  hdu: z.int().nonnegative().optional(),
  frames: z
    .strictObject({
      bias: files.optional(),
      dark: files.optional(),
      pixel_flat: files.optional(),
      fibre_flat: files.optional(),
      arc: files.optional(),
      twilight: files.optional(),
    })
    .optional(),
  object: z
    .array(
      z.strictObject({
        name,
        frames: files,
        sky: sky.optional(),
        combine: z.boolean().optional(),
      }),
    )
    .optional(),
  wanted: z
    .strictObject({
      method: z.enum(["joint", "optimal", "boxcar"]).optional(),
      crosstalk: z.boolean().optional(),
      half_aperture: z.number().positive().optional(),
      precision: z.enum(["auto", "f32", "f64"]).optional(),
      cosmic_rays: z.boolean().optional(),
      refine: z.boolean().optional(),
      profile: z.enum(["auto", "gaussian", "hermite", "empirical"]).optional(),
      trust_names: z.boolean().optional(),
      wavelengths: z.boolean().optional(),
      throughput: z.enum(["twilight", "fibre flat", "off"]).optional(),
      sky: sky.optional(),
      combine: z.boolean().optional(),
      rebin: z.enum(["off", "linear", "log"]).optional(),
      rebin_step: z.number().positive().optional(),
      rebin_range: z.tuple([z.number().positive(), z.number().positive()]).optional(),
      tables: z.enum(["off", "ecsv", "fits"]).optional(),
    })
    .optional(),
});

export type PlanTree = z.infer<typeof planSchema>;

interface Key {
  /** What a value must be: "… was expected". */
  value: string;
  meaning: string;
}

const list = (what: string): Key => ({ value: "a list of file names", meaning: what });
const flag = (meaning: string): Key => ({ value: "true or false", meaning });

/** By table, "" being the top. */
export const PLAN_KEYS: Record<string, Record<string, Key>> = {
  "": {
    name: { value: "a string", meaning: "what to call the night" },
    folder: {
      value: "the name of a folder",
      meaning: "where the frames lie, seen from this file (default: beside it)",
    },
    spectrograph: {
      value: "the name of a TOML file",
      meaning: "what is known of detector and slit, seen from this file",
    },
    bad_pixels: {
      value: "the name of a FITS file",
      meaning: "image of the assembled frame, not 0 where a pixel is bad; seen from this file",
    },
    hdu: { value: "a whole number, 0 or more", meaning: "which HDU of the raw frames holds the image, from 0" },
    frames: { value: "a table", meaning: "calibration frames by role" },
    object: { value: "one or more [[object]] tables", meaning: "what was observed" },
    wanted: { value: "a table", meaning: "what to make of the frames, and how" },
  },
  frames: {
    bias: list("taken off"),
    dark: list("taken off by the exposure's time"),
    pixel_flat: list("frames of an evenly lit detector, divided by"),
    fibre_flat: list("lamp through all fibres: tells where their light runs"),
    arc: list("lines of known wavelength"),
    twilight: list("evenly lit sky: how much each fibre lets through"),
  },
  object: {
    name: { value: "a string", meaning: "of the field" },
    frames: list("exposures of this field"),
    sky: { value: '"on", "off" or "scaled"', meaning: "other than wanted.sky, for this field" },
    combine: flag("other than wanted.combine, for this field"),
  },
  wanted: {
    method: { value: '"joint", "optimal" or "boxcar"', meaning: 'how light is gathered (default: "joint")' },
    crosstalk: flag("give back what optimal and boxcar let neighbours take; joint always does (default: true)"),
    half_aperture: {
      value: "a number of pixels over 0",
      meaning: "half of the boxcar's width (default: half of the smallest pitch)",
    },
    precision: {
      value: '"auto", "f32" or "f64"',
      meaning: 'numbers that the kernels reckon with (default: "auto", f32 where it serves)',
    },
    cosmic_rays: flag("reject pixels hit by cosmic rays (default: true)"),
    refine: flag("refine a measured profile on each frame's own light (default: true)"),
    profile: {
      value: '"auto", "gaussian", "hermite" or "empirical"',
      meaning: 'how light spreads across a tramline (default: "auto", what fits the flat best)',
    },
    trust_names: flag(
      "extract a frame even if its light does not tell its fibres' names: each spectrum may then bear another fibre's number (default: false)",
    ),
    wavelengths: flag(
      "from the arcs, by lamps and range of the spectrograph file (default: true where there are arcs)",
    ),
    throughput: {
      value: '"twilight", "fibre flat" or "off"',
      meaning: "what fibres are compared by (default: twilight where there is one, else the fibre flat)",
    },
    sky: {
      value: '"on", "off" or "scaled"',
      meaning: 'take off the sky that slit.sky sees (default: "on" where fibres of it are known)',
    },
    combine: flag("join the frames of a field into one set of spectra (default: true)"),
    rebin: {
      value: '"off", "linear" or "log"',
      meaning: 'put all fibres on one grid; neighbouring bins then share noise (default: "off")',
    },
    rebin_step: { value: "a number over 0", meaning: "Å for linear, km/s for log (default: the median dispersion)" },
    rebin_range: {
      value: "two numbers over 0, in Å",
      meaning: "middles of the first and the last bin (default: all fibres)",
    },
    tables: {
      value: '"off", "ecsv" or "fits"',
      meaning: 'one table a fibre and target beside the spectra (default: "off")',
    },
  },
};

/** The same for messages. */
export const PLAN_VALUES: TomlKeys = Object.fromEntries(
  Object.entries(PLAN_KEYS).map(([table, keys]) => [
    table,
    Object.fromEntries(Object.entries(keys).map(([key, { value }]) => [key, value])),
  ]),
);

/** Every key with its meaning, for help: one line each. */
export function planKeyLines(): string[] {
  return Object.entries(PLAN_KEYS).flatMap(([table, keys]) => {
    const heading = table === "" ? [] : [table === "object" ? "[[object]]" : `[${table}]`];
    const plain = Object.entries(keys).filter(([, { value }]) => !/tables?$/.test(value));
    return [...heading, ...plain.map(([key, { meaning, value }]) => `${key.padEnd(14)} ${meaning}; ${value}`)];
  });
}
