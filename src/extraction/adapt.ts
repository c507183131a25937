/** The flat's tramlines and profile made the frame's own: moved to where its light sits, and refined on its light. */
import type { Frame } from "../detector/frame.js";
import type { Kernels } from "../kernels/module.js";
import type { SmoothBackground } from "../reference/extract.js";
import { type SampleSize, sampleColumns } from "../tramlines/columnSample.js";
import { deadLightWarnings, measureDeadLight } from "../tramlines/deadLight.js";
import { compareOneOff, type OneOff, requireNamesFit } from "../tramlines/oneOff.js";
import { activeFibres, linesOf } from "../tramlines/profileTable.js";
import { refineShape } from "../tramlines/shape/refine.js";
import { measureShift, type Shift, shiftSample, shiftTramlines } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { noBackground } from "./background.js";
import type { Adapted, ExtractionOptions } from "./options.js";
import { openFrame } from "./settle.js";
import { startBackground } from "./smooth.js";

/** Columns looked at when the usual ones are dark. */
const denseSample: SampleSize = { nGroup: 64, together: 1 };

/** @throws TraceError when the frame's light does not tell that fibres are named rightly, or when many dead ones shine. */
export function adaptTramlines(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions,
): Adapted {
  const warnings: string[] = [];
  let [adapted, shift]: [Tramlines, Shift | null] = [tramlines, null];
  let oneOff: OneOff | null = null;
  let background: SmoothBackground | undefined;
  if (options.shift !== false) {
    let sample = sampleColumns(kernels, frame, tramlines, shiftSample, undefined, frame.memory);
    try {
      const none = options.background === false ? noBackground() : undefined;
      shift = measureShift(kernels, frame, tramlines, none, sample);
      if (shift === null) {
        // An arc of few lines is dark in most columns.
        sample.release();
        sample = sampleColumns(kernels, frame, tramlines, denseSample, undefined, frame.memory);
        shift = measureShift(kernels, frame, tramlines, none, sample);
      }
      if (shift === null) {
        warnings.push(
          `${frame.name}: too little light to measure its shift against the flat, so none is applied; spectra are right only if nothing moved since the flat, and by a whole fibre neither, since names are not checked then.`,
        );
      } else {
        adapted = shiftTramlines(tramlines, shift);
        // Light at dead positions is allowed for, or it would be taken for background.
        const positions = Array.from(tramlines.state.keys());
        background = none ?? startBackground(sample, adapted, positions);
        oneOff = compareOneOff(kernels, frame, adapted, background, sample);
        if (oneOff === null) warnings.push(`${frame.name}: so few fibres are lit that their names cannot be checked.`);
        else if (options.checkNames !== false) requireNamesFit(frame, oneOff);
        const dead = measureDeadLight(kernels, frame, adapted, background, sample);
        warnings.push(...deadLightWarnings(frame, dead, tramlines.nFibre));
      }
    } finally {
      sample.release();
    }
  }
  const tooFaint = options.shift !== false && shift === null;
  if (options.refine === false || tooFaint || adapted.profile.kind === "gaussian") {
    return { tramlines: adapted, shift, oneOff, refined: false, background, warnings };
  }
  const refined = refineOn(kernels, frame, adapted, options, background);
  return { tramlines: refined, shift, oneOff, refined: true, background, warnings };
}

/** The profile refined on what a first look at the frame leaves after background and cosmic rays. */
function refineOn(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions,
  start: SmoothBackground | undefined,
): Tramlines {
  const { profile } = tramlines;
  if (profile.kind === "gaussian") return tramlines;
  const { bench, input, background } = openFrame(kernels, frame, tramlines, options, start);
  bench.run(0, input.nx);
  const lines = linesOf(tramlines, activeFibres(tramlines));
  const shape = refineShape(
    kernels,
    profile.known,
    profile.shape,
    lines,
    frame,
    background ?? noBackground(),
    bench.rejected,
  );
  bench.release();
  return { ...tramlines, profile: { ...profile, shape } };
}
