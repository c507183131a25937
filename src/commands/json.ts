/** What --json prints: one object for each command, described key by key. Numbers that do not exist are null. Keys may be
 * added under the same `format`; none is renamed or removed. */
import { z } from "zod";
import { Flag } from "../reference/bits.js";
import { arcKeys } from "./arcJson.js";
import { combineKeys } from "./combineJson.js";
import { comparisonKeys, gainKeys } from "./compareJson.js";
import { planKeys } from "./planJson.js";
import { rebinKeys } from "./rebinJson.js";
import { runKeys } from "./runJson.js";
import { stackKeys } from "./stackJson.js";
import { tablesKeys } from "./tablesJson.js";
import { calibrationKeys, throughputKeys } from "./throughputJson.js";

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

const plan = z.strictObject({ ...head("plan"), ...planKeys, ...tail });

const run = z.strictObject({ ...head("run"), ...runKeys, ...tail });

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
  seams: z
    .array(z.strictObject({ before: count, after: count, axis: z.enum(["x", "y"]), at: count, step: measured }))
    .describe("light just behind a seam between amplifiers over that before it, less 1; `at`: its first pixel, from 1"),
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

const fibres = z
  .strictObject({
    positions: count,
    blocks: count,
    lit: count,
    dim: count,
    dead: count,
    dimPositions: z.array(count),
    deadPositions: z.array(count),
  })
  .describe("slit positions and what was seen of them; positions count from 1");

const tracing = {
  fibres,
  degree: count.describe("of the tramlines' Legendre series"),
  rmsPixels: number.describe("scatter of all fibres' measured centres about their tramlines"),
  worstRmsPixels: number,
  worstFibre: count,
  naming: z
    .strictObject({ score: z.number(), runnerUpScore: number, readings: z.array(z.string()) })
    .describe("logarithms of likelihood of the naming chosen and of the best other one"),
  profile: z.strictObject({
    kind: z.string(),
    medianFwhmPixels: number,
    relativeError: number,
    tried: z
      .array(z.strictObject({ kind: z.string(), misfit: number, error: number }))
      .describe("models tried, with their misfit per degree of freedom on columns held out of every fit"),
  }),
};

const trace = z.strictObject({ ...head("trace"), output: z.string(), ...tracing, ...tail });

const flags = z
  .strictObject(
    Object.fromEntries(
      Object.keys(Flag)
        .filter((name) => Number.isNaN(Number(name)))
        .map((name) => [name, count]),
    ),
  )
  .describe("spectrum points with each flag, dead fibres aside");

const crosstalk = z.strictObject({
  estimator: z.enum(["boxcar", "optimal"]),
  halfAperturePixels: number.describe("null for optimal"),
  modelByDistance: z
    .array(z.strictObject({ distance: count, share: number }))
    .describe(
      "from the profile model: median share of a fibre's light that the fibre so many slit positions away counts",
    ),
  seen: z
    .array(
      z.strictObject({
        frame: z.string(),
        disagreeing: count.describe("leaks over 4 sigma from the model"),
        leaks: z.array(z.strictObject({ lit: count, fibre: count, share: number, error: number, model: number })),
      }),
    )
    .describe("from frames with single lit fibres: light at a dark fibre over that at the lit one"),
});

const extract = z.strictObject({
  ...head("extract"),
  output: z.string(),
  frame: z.string(),
  method: z.enum(["joint", "optimal", "boxcar"]),
  crosstalkCorrected: z.boolean(),
  precision: z.enum(["f32", "f64"]),
  cosmicRays: z.boolean(),
  tracing: z.strictObject(tracing).nullable().describe("null when the tramlines came from a file"),
  fibres,
  columns: count.describe("of each spectrum"),
  shift: z
    .strictObject({
      pixels: z.number().describe("of the frame's light against the tramlines, in the middle of the frame"),
      error: number,
      alongDispersion: z.number().describe("its change from the middle to the last column"),
      alongSlit: z.number().describe("its change from the middle to the last row"),
      rmsPixels: number,
    })
    .nullable()
    .describe("applied before extracting; null when there was too little light to measure it"),
  profileError: number.describe("share of the light nearby by which pixels miss the profiles beyond noise"),
  refinedProfile: z.boolean().describe("whether the profile was refined on this frame"),
  rejectedPixels: count.describe("as cosmic rays"),
  backgroundErrorElectrons: number.describe("standard error of the smooth background from noise alone, over the frame"),
  points: count.describe("spectrum points of fibres that are not dead"),
  usablePoints: count.describe("of those, without a flag that forbids their use"),
  flags,
  signalToNoise: z
    .strictObject({ faintest: number, median: number, brightest: number })
    .describe("per pixel, over the fibres' own medians"),
  spectra: z.array(
    z.strictObject({
      fibre: count,
      state: z.enum(["lit", "dim", "dead"]),
      block: count,
      medianSignalToNoise: number,
      usableShare: number,
    }),
  ),
  pair: z
    .strictObject({
      hitPixels: count,
      scale: number.describe("light of the frame over that of the second one"),
      profileError: number.describe("share of the light nearby by which the two differ beyond noise"),
      lineError: number.describe("share of a spectrum's change along x by which the two differ beyond noise"),
    })
    .nullable()
    .describe("cosmic rays found by a second frame; null without --pair"),
  crosstalk: crosstalk.nullable().describe("null for joint unless asked for"),
  ...calibrationKeys,
  targets: z
    .array(
      z.strictObject({
        name: z.string(),
        fibres: z.array(count),
        used: z.array(count).describe("without the dead ones"),
        medianSignalToNoise: number.describe("of the sum, per pixel"),
        neglectedShare: number.describe("largest share of the variance that covariances beyond next neighbours add"),
      }),
    )
    .describe("sums of fibres, as 'slit.targets' of the spectrograph file names them"),
  ...tail,
});

const compare = z.strictObject({
  ...head("compare"),
  frame: z.string(),
  points: count.describe("good in every method"),
  witnesses: count.describe("of those, beside a fibre 30 times brighter"),
  methods: z.array(
    z.strictObject({
      method: z.enum(["joint", "optimal", "boxcar"]),
      crosstalkCorrected: z.boolean(),
      medianSignalToNoise: number,
      equivalentExposure: number.describe("time the corrected boxcar would need for the same error bars"),
      equivalentExposureFaint: number.describe("the same over the faintest quarter of the points"),
      ...gainKeys,
      fluxRatio: number.describe("median flux over joint's"),
      leakedShare: number.describe("share of a bright neighbour's light counted twice, against joint"),
      seconds: z.number().optional().describe("wall clock; not in the file that -o writes"),
    }),
  ),
  ...comparisonKeys,
  cautions: z.array(z.string()),
  ...tail,
});

const verify = z.strictObject({
  ...head("verify"),
  frame: z.string(),
  worstWeight: number.describe("largest difference of a pixel's weight"),
  checks: z.array(
    z.strictObject({
      method: z.enum(["joint", "optimal", "boxcar"]),
      crosstalkCorrected: z.boolean(),
      precision: z.enum(["f32", "f64"]),
      nPoint: count,
      worstRelative: number,
      worstSigma: number,
      worstOverBound: number.describe("above 1 the check fails"),
      worstVariance: number,
      rejectedDiffer: count,
      flagsDiffer: count,
      passed: z.boolean(),
    }),
  ),
  passed: z.boolean(),
  ...tail,
});

const grade = z.enum(["good", "doubtful", "bad"]);

const recover = z.strictObject({
  ...head("recover"),
  frame: z.string(),
  method: z.enum(["joint", "optimal", "boxcar"]),
  profile: z.string().describe("kind of the profiles under test"),
  injectedFrom: z.array(z.string()).describe("the flats whose pixels were injected"),
  seed: count,
  flatElectrons: number.describe("median light of the flat's fibres, e- per column"),
  flawedPixels: count.describe("of the flat, bad or hit by a cosmic ray, replaced by the median of their neighbours"),
  movedPixels: z.number().describe("how far the flat's light was moved to the frame's, pixels at most"),
  verdict: z.strictObject({
    grade,
    sentence: z.string(),
    findings: z.array(
      z.strictObject({
        about: z.enum(["flux", "error bars", "leaked light", "emission lines", "dark positions"]),
        grade,
        sentence: z.string(),
      }),
    ),
  }),
  cells: z
    .array(
      z.strictObject({
        from: z.number(),
        to: z.number(),
        place: z
          .enum(["adjacent", "next but one", "far"])
          .describe("to a fibre 30 times brighter than all the light in this one"),
        nPoint: count,
        nFibre: count,
        bias: number.describe("(sum of found - sum of known) / sum of known"),
        biasError: number,
        pull: number.describe("robust standard deviation of (found - known) / sigma about 0"),
        beyond5Sigma: number,
        falselyFlaggedShare: number.describe("newly flagged as hit by a cosmic ray"),
        nLine: count.describe("unresolved emission lines injected"),
        lineFlaggedShare: number.describe("that had a pixel rejected at their peak"),
        lineClippedShare: number.describe("that lost over a fifth of their light, beyond 5 sigma"),
      }),
    )
    .describe("by injected light, e- per column, and place"),
  dark: z
    .array(
      z.strictObject({
        light: z.enum(["injected", "own"]),
        distance: count.describe("1 beside a lit fibre, 2 next but one"),
        nPosition: count,
        meanShare: number.describe("of the brighter lit neighbour's light that is found at dark positions"),
        meanError: number,
        worstShare: number,
        worstError: number,
        worstPosition: z.string(),
        pull: number.describe("robust standard deviation of found / sigma about 0"),
      }),
    )
    .describe("places without a fibre, extracted like fibres: the right answer is 0"),
  worstFibre: z
    .strictObject({ fibre: count, bias: number, error: number })
    .nullable()
    .describe("of the highest level injected"),
  ...tail,
});

const demo = z.strictObject({
  ...head("demo"),
  folder: z.string(),
  products: z.array(z.string()).describe("files in the folder, beside the simulated frames"),
  tracing: z.strictObject(tracing),
  traceAgainstTruth: z
    .strictObject({ offset: number, rms: number, worstRms: number, worstFibre: count, nMisnamed: count })
    .describe("pixels; rms about the offset that all fibres share"),
  runs: z.array(
    z.strictObject({
      frame: z.string(),
      method: z.enum(["joint", "optimal", "boxcar"]),
      crosstalkCorrected: z.boolean(),
      shiftPixels: z.number().describe("how far the frame's light has moved since the flat"),
      measuredShiftPixels: number.describe("the same as the extraction measured and applied it"),
      decades: z
        .array(
          z.strictObject({
            from: z.number(),
            to: z.number(),
            nPoint: count,
            usableShare: z.number(),
            bias: number.describe("median of (flux - truth) / truth"),
            pull: number.describe("robust standard deviation of (flux - truth) / sigma about 0"),
            beyond5Sigma: number,
          }),
        )
        .describe("by true flux, e- per column"),
      leak: z.strictObject({
        contrast: z.number().describe("how many times brighter the neighbour is"),
        nFibre: count,
        nPoint: count,
        meanShare: number.describe("of the neighbour's light that ends up in the fibre"),
        worstShare: number,
        worstFibre: count,
      }),
      cosmicRays: z.strictObject({
        nHit: count.describe("points hit by over 5 sigma"),
        foundShare: number,
        spoiltShare: number.describe("neither flagged nor within 5 sigma of the truth"),
        nClean: count,
        falseShare: number,
      }),
    }),
  ),
  ...tail,
});

const combine = z.strictObject({ ...head("combine"), ...combineKeys, ...tail });

const throughput = z.strictObject({ ...head("throughput"), ...throughputKeys, ...tail });

const rebin = z.strictObject({ ...head("rebin"), ...rebinKeys, ...tail });

const stack = z.strictObject({ ...head("stack"), ...stackKeys, ...tail });

const tables = z.strictObject({ ...head("tables"), ...tablesKeys, ...tail });

const arc = z.strictObject({ ...head("arc"), ...arcKeys, ...tail });

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
export const jsonSchemas = {
  demo,
  simulate,
  plan,
  run,
  look,
  stack,
  trace,
  extract,
  arc,
  compare,
  verify,
  recover,
  combine,
  throughput,
  rebin,
  tables,
  failure,
};

export type CommandName = Exclude<keyof typeof jsonSchemas, "failure">;

/** What a command fills in; the first three keys are the same for all. */
export type JsonOf<C extends CommandName> = Omit<z.infer<(typeof jsonSchemas)[C]>, "hatchel" | "format" | "command">;

/** A command's keys, for its help. */
export function jsonHelp(command: CommandName): string {
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
