/** A scene: everything the forward model needs to know, as a TOML file a person writes. Sizes are in pixels, slit
 * positions and file columns count from 1, electrons are detected electrons. See `scenes.ts` for two complete ones. */
import { readFileSync } from "node:fs";
import { basename } from "node:path";
import { parse, TomlError } from "smol-toml";
import { z } from "zod";
import { checkScene } from "./sceneChecks.js";
import { SceneError, sentence } from "./sceneMessages.js";

// The upper ends keep every product of them finite; none is near anything that a detector sees.
const positive = z.number().positive().max(1e9);
const amount = z.number().min(0).max(1e9);
const pixels = z.number().min(-1e6).max(1e6);
const ascii = (most: number) =>
  z
    .string()
    .min(1)
    .regex(/^[ -~]*$/, "expected plain ASCII, since it goes into FITS headers")
    .max(most);
const share = z.number().min(0).max(0.9);
const whole = z.int();

const amplifier = z.strictObject({
  /** e⁻/ADU and e⁻. */
  gain: positive,
  read_noise: amount,
  /** ADU. */
  bias: amount.default(1000),
  /** ADU: how far the level wanders along the readout. */
  drift: amount.default(0),
  /** Columns of overscan in the file. */
  overscan: whole.min(0).max(512).default(32),
  /** FITS section of the assembled frame; absent: all of it. */
  place: z.string().optional(),
});

const detector = z.strictObject({
  /** FITS axes 1 and 2 of the assembled frame. */
  size: z.tuple([whole.min(16).max(16384), whole.min(16).max(16384)]),
  dispersion_axis: z.literal([1, 2]).default(1),
  /** ADU; the converter clips here. */
  saturation: whole.min(1).max(65535).default(65535),
  /** e⁻ per pixel and second. */
  dark: amount.default(0),
  /** Relative rms of the pixels' response about 1. */
  response_rms: z.number().min(0).max(0.2).default(0),
  /** ADU rms of a fixed column pattern in the bias. */
  bias_pattern: amount.default(0),
  /** Columns of the assembled file, from 1. */
  bad_columns: z.array(whole.min(1)).default([]),
  amplifier: z.array(amplifier).min(1).max(16),
});

const slit = z.strictObject({
  blocks: z.array(whole.min(1)).min(1),
  pitch: positive,
  gap: z.union([amount, z.array(amount)]).default(0),
  /** y of the first fibre in the middle column; absent: the slit is centred. */
  first: pixels.optional(),
  dead: z.array(whole.min(1)).default([]),
  sky: z.array(whole.min(1)).default([]),
});

/** Coefficients of Legendre polynomials in t, the column mapped to [−1, 1]; s is the slit position mapped to [−1, 1]. */
const tramlines = z.strictObject({
  tilt: pixels.default(0), // P1
  fan: pixels.default(0), // s · P1
  bow: pixels.default(0), // P2
  bow_fan: pixels.default(0), // s · P2
  curl: pixels.default(0), // P3
  quartic: pixels.default(0), // P4
  /** Each fibre's own, rms, pixels. */
  own_place: amount.default(0),
  own_tilt: amount.default(0),
  own_bow: amount.default(0),
});

const profile = z.strictObject({
  /** Of the core. */
  fwhm: z.number().min(0.5).max(50),
  /** Relative: width = 1 + tilt·P1(t) + bow·P2(t) + across·s + across_bow·s². */
  tilt: pixels.default(0),
  bow: pixels.default(0),
  across: pixels.default(0),
  across_bow: pixels.default(0),
  /** Each fibre's own width, relative rms. */
  own_width: z.number().min(0).max(0.2).default(0),
  second_share: share.default(0),
  /** In units of the core's σ. */
  second_width: z.number().min(0.5).max(5).default(1.6),
  second_offset: z.number().min(-3).max(3).default(0),
  /** second_share · (1 + second_tilt·t + second_across·s) */
  second_tilt: z.number().min(-0.4).max(0.4).default(0),
  second_across: z.number().min(-0.4).max(0.4).default(0),
  wing_share: share.default(0),
  wing: z.enum(["exponential", "moffat"]).default("exponential"),
  /** Pixels, at the profile's mean width. */
  wing_scale: positive.default(4),
  wing_beta: z.number().min(1.1).max(20).default(2.5),
  /** Pixels, at the profile's mean width: where the light ends. */
  reach: z.number().min(3).max(1000).default(60),
});

const wavelength = z.strictObject({
  medium: z.literal("air").default("air"),
  /** Å at the first and the last column, in the middle of the slit; may fall. */
  range: z.tuple([positive, positive]),
  /** Å: P2(t), P3(t), and s² (lines bowed along the slit). */
  curve: pixels.default(0),
  cubic: pixels.default(0),
  slit_bow: pixels.default(0),
  /** Each fibre's own, pixels rms. */
  own_place: amount.default(0),
  /** Pixels: width of an unresolved line. */
  fwhm: z.number().min(0.8).max(30).default(2.2),
  lamps: z.array(z.enum(["Ne", "Ar", "Hg", "Cu"])).default(["Ne", "Ar", "Hg", "Cu"]),
});

const light = z.strictObject({
  /** Relative throughput: rms from fibre to fibre, and the size of its change along x. */
  throughput_rms: z.number().min(0).max(0.4).default(0),
  throughput_slope: z.number().min(0).max(0.4).default(0),
  /** Electrons per column in a fibre of throughput 1, per second of exposure. */
  flat_rate: positive.default(2000),
  twilight_rate: positive.default(500),
  /** Electrons of the brightest arc line, and of all of a detector flat's pixels, per second. */
  arc_rate: positive.default(5000),
  detector_flat_rate: positive.default(1500),
  /** Share of the light that ends up as a smooth surface. */
  scattered_share: z.number().min(0).max(0.5).default(0),
});

const science = z.strictObject({
  /** Electrons per column of the faintest and the brightest target in `seconds`; spread evenly in the logarithm. */
  faintest: positive.default(10),
  brightest: positive.default(1e5),
  seconds: positive.default(900),
  /** One level a slit position instead, repeated when shorter. */
  levels: z.array(amount).min(1).optional(),
  /** Relative size of the continuum's slow changes. */
  colour: z.number().min(0).max(0.9).default(0.3),
  /** Absorption lines a target, and their greatest depth. */
  absorption_lines: whole.min(0).max(200).default(12),
  absorption_depth: z.number().min(0).max(0.95).default(0.6),
  /** Share of the targets with emission lines, and the brightest line's electrons in `seconds`. */
  emission_share: z.number().min(0).max(1).default(0.5),
  emission_brightest: positive.default(1e5),
  /** Electrons per column in `seconds`; and of the brightest night-sky line. */
  sky_level: amount.default(0),
  sky_line: amount.default(0),
});

const cosmicRays = z.strictObject({
  /** Hits on the frame in 1000 s. */
  rate: z.number().min(0).max(1e5),
  /** Pixels, of the mean track; electrons of the median hit. */
  length: z.number().positive().max(1000).default(4),
  electrons: positive.default(2000),
  /** Seconds that the detector waits on top of the exposure while it is read. */
  readout_seconds: amount.default(30),
});

const KINDS = ["bias", "dark", "detector-flat", "fibre-flat", "arc", "twilight", "science"] as const;

const exposure = z.strictObject({
  name: z.string().regex(/^[A-Za-z0-9_-]{1,40}$/, "expected a file name of letters, digits, _ and -"),
  kind: z.enum(KINDS),
  seconds: amount.default(0),
  object: ascii(60).optional(),
  /** Of all the light. */
  brightness: amount.default(1),
  /** Pixels, of the light along the slit against the tramlines; `stretch` per pixel from the middle row. */
  shift: pixels.default(0),
  stretch: z.number().min(-0.01).max(0.01).default(0),
  /** Pixels, along dispersion: a wavelength moves to a column higher by this. */
  dispersion_shift: pixels.default(0),
  cosmic_rays: z.boolean().default(true),
});

const sceneSchema = z.strictObject({
  name: ascii(60),
  seed: whole.min(0),
  /** One Gaussian, nothing else: no second Gaussian, wings, scattered light, cosmic rays, response or bad columns. */
  clean: z.boolean().default(false),
  detector,
  slit,
  tramlines: tramlines.prefault({}),
  profile,
  wavelength,
  light: light.prefault({}),
  science: science.prefault({}),
  cosmic_rays: cosmicRays.optional(),
  exposure: z.array(exposure).min(1),
});

export type Scene = z.infer<typeof sceneSchema>;
export type SceneExposure = Scene["exposure"][number];
export type ExposureKind = SceneExposure["kind"];
export type SceneAmplifier = Scene["detector"]["amplifier"][number];

/** @throws SceneError when the file cannot be read or is no scene. */
export function readScene(path: string): Scene {
  let text: string;
  try {
    text = readFileSync(path, "utf8");
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code;
    const why =
      code === "ENOENT" ? "there is no such file" : code === "EISDIR" ? "is a folder" : `cannot be read (${code})`;
    throw new SceneError(`${path}: ${why}; give the path of a scene in TOML`);
  }
  return parseScene(text, basename(path));
}

/** A scene from TOML text; `name` is what messages call it.
 * @throws SceneError, whatever the text. */
export function parseScene(text: string, name: string): Scene {
  const parsed = sceneSchema.safeParse(parseToml(text, name), { reportInput: true });
  if (!parsed.success) throw new SceneError(sentence(parsed.error.issues, name));
  const scene = parsed.data.clean ? cleaned(parsed.data) : parsed.data;
  const complaint = checkScene(scene);
  if (complaint !== undefined) throw new SceneError(`${name}: ${complaint}`);
  return scene;
}

function parseToml(text: string, name: string): unknown {
  try {
    return parse(text);
  } catch (error) {
    if (!(error instanceof TomlError)) throw error;
    const what = error.message.split("\n")[0].replace(/^Invalid TOML document: /, "");
    throw new SceneError(
      `${name}: line ${error.line}, column ${error.column}: not valid TOML (${what}); correct that line`,
    );
  }
}

/** All the ingredients out that stand between the frame and a pure Gaussian. */
function cleaned(scene: Scene): Scene {
  const { cosmic_rays: _without, ...rest } = scene;
  return {
    ...rest,
    detector: { ...scene.detector, response_rms: 0, bad_columns: [], bias_pattern: 0, dark: 0 },
    profile: { ...scene.profile, second_share: 0, wing_share: 0 },
    light: { ...scene.light, scattered_share: 0 },
  };
}
