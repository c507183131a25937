/** What --json prints: one object for each command, described key by key. Numbers that do not exist are null. Keys may be
 * added under the same `format`; none is renamed or removed. */
import { z } from "zod";

const number = z.number().nullable();
const count = z.int().min(0);

const head = (command: string) => ({
  hatchel: z.string().describe("the program's version"),
  format: z.literal(1).describe("of this object"),
  command: z.literal(command),
});
const tail = {
  assumptions: z.array(z.string()).describe("what was assumed for want of better knowledge, one sentence each"),
  warnings: z.array(z.string()).describe("what looks wrong, one sentence each"),
};

const measured = z.strictObject({ value: z.number(), error: number });

const look = z.strictObject({
  ...head("look"),
  frame: z.string().describe("the file's name"),
  size: z.tuple([count, count]).describe("pixels of the image in the file, FITS axes 1 and 2"),
  bitpix: number,
  kind: z.string().describe("bias, dark, detector flat, fibre flat, flat, arc, twilight, science or unknown"),
  kindFrom: z.string().describe("the header card that says so; empty when none does"),
  exposureSeconds: number,
  dispersionAxis: number.describe("FITS axis along which wavelength is taken to run"),
  dispersionAxisSeen: number.describe("the same as the picture shows it; null when it does not"),
  binning: z.tuple([z.number(), z.number()]).nullable(),
  saturationAdu: number,
  amplifiers: z
    .array(
      z.strictObject({
        amplifier: count,
        data: z.string().nullable(),
        place: z.string().nullable(),
        givenGain: number,
        givenReadNoise: number,
        gain: measured.nullable(),
        readNoise: measured.nullable(),
        readNoiseAdu: measured.nullable(),
        readNoiseFrom: z.string().nullable(),
      }),
    )
    .describe("gain in e-/ADU and read noise in e-, as given and as measured, from 1"),
  levelUnit: z.enum(["electron", "adu"]),
  levels: z
    .strictObject({
      p1: number,
      p5: number,
      median: number,
      p95: number,
      p99: number,
      saturatedShare: number,
      missingShare: number,
    })
    .nullable()
    .describe("levels below which 1, 5, 50, 95 and 99 % of the pixels lie"),
  ribbons: z
    .strictObject({ count, pitch: number, irregularity: number })
    .nullable()
    .describe("ribbons of light in a cut across dispersion"),
  ...tail,
});

const simulate = z.strictObject({
  ...head("simulate"),
  scene: z.string().describe("the scene's own name"),
  folder: z.string(),
  spectrograph: z.string().describe("the spectrograph file, below the folder"),
  badPixels: z.string(),
  exposures: z.array(
    z.strictObject({ name: z.string(), kind: z.string(), raw: z.string(), truth: z.string().nullable() }),
  ),
  ...tail,
});

const failure = z.strictObject({
  hatchel: z.string(),
  format: z.literal(1),
  command: z.string().nullable(),
  error: z.strictObject({
    kind: z.enum(["usage", "input", "defect"]).describe("usage: wrong options; input: a file or a frame will not do"),
    message: z.string().describe("one sentence with what was found and the remedy"),
    exitCode: z.union([z.literal(1), z.literal(2)]),
  }),
});

/** By command; `failure` is what any of them prints instead when it fails. */
export const jsonSchemas = { look, simulate, failure };

/** A command's keys, for its help. */
export function jsonHelp(command: keyof typeof jsonSchemas): string {
  const keys = Object.keys(jsonSchemas[command].shape);
  const list = keys.reduce<string[]>((lines, key, i) => {
    const word = `${key}${i + 1 < keys.length ? "," : ""}`;
    const last = lines[lines.length - 1];
    if (last !== undefined && last.length + word.length < 92) lines[lines.length - 1] = `${last} ${word}`;
    else lines.push(word);
    return lines;
  }, []);
  return `\nThe object that --json prints (schema: dist/commands/json.js) has the keys\n  ${list.join("\n  ")}`;
}
