/** The spectrograph file: what an observer knows of detector, slit and lamps, in TOML. Every key may be left out. */
import { readFile } from "node:fs/promises";
import { basename, dirname, resolve } from "node:path";
import { z } from "zod";
import { parseSection } from "./fits/sections.js";
import { type TomlKeys, tomlComplaint, tomlTree } from "./tomlSentences.js";

const section = z.string().superRefine((text, context) => {
  try {
    parseSection(text);
  } catch {
    context.addIssue({ code: "custom", message: `a FITS section such as "[1:1024,1:910]"` });
  }
});
const positive = z.number().positive();
const count = z.int().positive();

const amplifier = z.strictObject({
  gain: positive.optional(),
  read_noise: positive.optional(),
  data: section.optional(),
  overscan: z.union([section, z.array(section).min(1)]).optional(),
  overscan_skip: z.int().nonnegative().optional(),
  place: section.optional(),
  bias_level: z.number().optional(),
});

const schema = z.strictObject({
  name: z.string().optional(),
  detector: z
    .strictObject({
      dispersion_axis: z.union([z.literal(1), z.literal(2)]).optional(),
      saturation: positive.optional(),
      bad_pixels: z.string().optional(),
      amplifier: z.array(amplifier).optional(),
    })
    .optional(),
  slit: z
    .strictObject({
      blocks: z.array(count).min(1).optional(),
      pitch: positive.optional(),
      gap: z.union([z.number().nonnegative(), z.array(z.number().nonnegative())]).optional(),
      dead: z.array(count).optional(),
      sky: z.array(count).optional(),
      targets: z.record(z.string(), z.array(count).min(1)).optional(),
    })
    .optional(),
  wavelength: z
    .strictObject({
      medium: z.enum(["air", "vacuum"]).optional(),
      range: z.tuple([positive, positive]).optional(),
      lamps: z.array(z.string()).optional(),
      lines: z.string().min(1).optional(),
    })
    .optional(),
});

/** Keys of each table, and what a value must be, in words for a reader. */
const KEYS: TomlKeys = {
  "": { name: "a string", detector: "a table", slit: "a table", wavelength: "a table" },
  detector: {
    dispersion_axis: "1 or 2",
    saturation: "a number over 0, in ADU",
    bad_pixels: "the name of a FITS file",
    amplifier: "one or more [[detector.amplifier]] tables",
  },
  "detector.amplifier": {
    gain: "a number over 0, in electrons per ADU",
    read_noise: "a number over 0, in electrons",
    data: 'a FITS section such as "[33:1056,1:910]"',
    overscan: 'a FITS section such as "[1:32,1:910]", or a list of them',
    overscan_skip: "a whole number of columns, 0 or more",
    place: 'a FITS section such as "[1:1024,1:910]"',
    bias_level: "a number, in ADU",
  },
  slit: {
    blocks: "a list of whole numbers, the fibres of each block",
    pitch: "a number over 0, in pixels",
    gap: "a number of pixels, or a list with one for each gap between blocks",
    dead: "a list of slit positions, counted from 1",
    sky: "a list of slit positions, counted from 1",
    targets: "a table of names, each with its list of slit positions",
  },
  "slit.targets": { "*": "a list of slit positions, counted from 1" },
  wavelength: {
    medium: '"air" or "vacuum"',
    range: "two numbers over 0, in Å, at the first and at the last column",
    lamps: 'a list of names such as ["Ne", "Ar"]',
    lines: "the name of a text file with wavelengths",
  },
};

/** One amplifier as the spectrograph file gives it; what is absent comes from the header. */
export interface SpectrographAmplifier {
  /** e⁻/ADU */
  gain?: number;
  /** e⁻ */
  readNoise?: number;
  /** FITS sections of the file. */
  data?: string;
  overscan?: string[];
  /** Overscan columns beside the data that are left out. */
  overscanSkip?: number;
  /** FITS section of the assembled frame. */
  place?: string;
  /** ADU: taken off where there is no overscan. */
  biasLevelAdu?: number;
}

export interface Spectrograph {
  /** What to call the file in messages. */
  file: string;
  name?: string;
  detector: {
    dispersionAxis?: 1 | 2;
    saturationAdu?: number;
    /** Absolute path. */
    badPixels?: string;
    amplifiers: SpectrographAmplifier[];
  };
  /** Slit positions count from 1, from low y upwards. */
  slit?: {
    blocks?: number[];
    /** px */
    pitch?: number;
    /** px beside one pitch, between blocks. */
    gap?: number | number[];
    dead: number[];
    sky: number[];
    /** Fibres that are summed, by the target's name. */
    targets?: { name: string; fibres: number[] }[];
  };
  wavelength?: {
    medium?: "air" | "vacuum";
    /** Å at the first and at the last column, roughly. */
    range?: [number, number];
    lamps: string[];
    /** Absolute path of the observer's own list (calibration/lineFile.ts). */
    lines?: string;
  };
}

export class SpectrographError extends Error {
  override name = "SpectrographError";
}

/** Reads a spectrograph file; paths inside are taken from its own folder.
 * @throws SpectrographError naming file, key, what was found and what was expected. */
export async function readSpectrograph(path: string): Promise<Spectrograph> {
  let text: string;
  try {
    text = await readFile(path, "utf8");
  } catch (error) {
    const reason = (error as NodeJS.ErrnoException).code === "ENOENT" ? "there is no such file" : "it cannot be read";
    throw new SpectrographError(`${path}: ${reason}, but a spectrograph file in TOML was expected; check its name.`);
  }
  return parseSpectrograph(text, { file: basename(path), folder: dirname(resolve(path)) });
}

/** The same from the text itself. `folder`: where its relative paths start. */
export function parseSpectrograph(text: string, { file, folder }: { file: string; folder: string }): Spectrograph {
  const parsed = tomlTree(text, file);
  if ("complaint" in parsed) throw new SpectrographError(parsed.complaint);
  const result = schema.safeParse(parsed.tree);
  if (!result.success) throw new SpectrographError(tomlComplaint(file, parsed.tree, result.error.issues[0], KEYS));
  const spectrograph = named(result.data, file, folder);
  checkSlit(spectrograph, file);
  return spectrograph;
}

function named(tree: z.infer<typeof schema>, file: string, folder: string): Spectrograph {
  const detector = tree.detector ?? {};
  const { slit, wavelength } = tree;
  return {
    file,
    ...given({ name: tree.name }),
    detector: {
      ...given({
        dispersionAxis: detector.dispersion_axis,
        saturationAdu: detector.saturation,
        badPixels: detector.bad_pixels === undefined ? undefined : resolve(folder, detector.bad_pixels),
      }),
      amplifiers: (detector.amplifier ?? []).map((entry) => given(amplifierNamed(entry))),
    },
    ...given({
      slit: slit && {
        ...given({ blocks: slit.blocks, pitch: slit.pitch, gap: slit.gap }),
        dead: slit.dead ?? [],
        sky: slit.sky ?? [],
        ...given({ targets: slit.targets && Object.entries(slit.targets).map(([name, fibres]) => ({ name, fibres })) }),
      },
      wavelength: wavelength && {
        ...given({
          medium: wavelength.medium,
          range: wavelength.range,
          lines: wavelength.lines === undefined ? undefined : resolve(folder, wavelength.lines),
        }),
        lamps: wavelength.lamps ?? [],
      },
    }),
  };
}

function amplifierNamed(entry: z.infer<typeof amplifier>) {
  return {
    gain: entry.gain,
    readNoise: entry.read_noise,
    data: entry.data,
    overscan: typeof entry.overscan === "string" ? [entry.overscan] : entry.overscan,
    overscanSkip: entry.overscan_skip,
    place: entry.place,
    biasLevelAdu: entry.bias_level,
  };
}

type Given<T> = { [K in keyof T]?: Exclude<T[K], undefined> };

/** Without the keys that have no value, so that "absent" has one form only. */
function given<T extends object>(entries: T): Given<T> {
  return Object.fromEntries(Object.entries(entries).filter(([, value]) => value !== undefined)) as Given<T>;
}

function checkSlit({ slit }: Spectrograph, file: string): void {
  for (const target of slit?.targets ?? []) checkTarget(target, file);
  if (slit?.blocks === undefined) return;
  const nFibre = slit.blocks.reduce((sum, n) => sum + n, 0);
  if (Array.isArray(slit.gap) && slit.gap.length !== slit.blocks.length - 1) {
    throw new SpectrographError(
      `${file}: 'slit.gap' lists ${slit.gap.length} gaps, but ${slit.blocks.length} blocks have ${slit.blocks.length - 1} between them; give one number for each gap, or one for all.`,
    );
  }
  const lists: [key: string, positions: number[]][] = [
    ["dead", slit.dead],
    ["sky", slit.sky],
    ...(slit.targets ?? []).map(({ name, fibres }): [string, number[]] => [`targets.${name}`, fibres]),
  ];
  for (const [key, positions] of lists) {
    const beyond = positions.find((position) => position > nFibre);
    if (beyond === undefined) continue;
    throw new SpectrographError(
      `${file}: 'slit.${key}' names position ${beyond}, but 'slit.blocks' adds up to ${nFibre}; positions count from 1.`,
    );
  }
}

/** Names go into FITS tables; a fibre counts once. */
function checkTarget({ name, fibres }: { name: string; fibres: number[] }, file: string): void {
  if (!/^[ -~]{1,68}$/.test(name)) {
    throw new SpectrographError(
      `${file}: 'slit.targets' has a target called '${name}', but 1 to 68 characters of plain ASCII were expected; rename it.`,
    );
  }
  const twice = fibres.find((fibre, i) => fibres.indexOf(fibre) < i);
  if (twice === undefined) return;
  throw new SpectrographError(
    `${file}: 'slit.targets.${name}' names position ${twice} twice, but a fibre counts once in a sum; leave one out.`,
  );
}
