/** The slit: how many fibres, in which blocks, how far apart, and which of them are dead. */
import { NamingError } from "./errors.js";

/** The slit as the spectrograph file tells it; slit positions count from 1, from low y upwards. */
export interface SlitLayout {
  blocks: number[];
  /** px */
  pitch: number;
  /** px beside one pitch, between blocks. */
  gap: number | number[];
  dead: number[];
  sky: number[];
}

/** A layout laid out position by position, lengths in pitches. */
export interface Slit {
  n: number;
  /** n: distance from the first position, in pitches. */
  at: Float64Array;
  /** n: gaps, in pitches, passed from the first position on. */
  gapsPassed: Float64Array;
  block: Int32Array;
  dead: Uint8Array;
  /** n + 1: positions listed as lit below this index. */
  litBelow: Int32Array;
}

/** @throws NamingError when the layout contradicts itself. */
export function unfold(layout: SlitLayout): Slit {
  const n = layout.blocks.reduce((sum, count) => sum + count, 0);
  const gaps = layout.blocks.slice(1).map((_, b) => (typeof layout.gap === "number" ? layout.gap : layout.gap[b]));
  if (n < 1 || !(layout.pitch > 0) || gaps.some((gap) => !(gap >= 0))) {
    throw new NamingError(
      `The slit layout has ${layout.blocks.length} blocks with ${n} fibres, pitch ${layout.pitch} px and gaps [${gaps.join(", ")}] px; ` +
        "it needs fibres, a pitch over 0 and one gap of 0 or more between each two blocks.",
    );
  }
  const wrong = layout.dead.find((position) => !(position >= 1 && position <= n));
  if (wrong !== undefined) {
    throw new NamingError(`The slit layout lists position ${wrong} as dead, but its positions run from 1 to ${n}.`);
  }
  const slit: Slit = {
    n,
    at: new Float64Array(n),
    gapsPassed: new Float64Array(n),
    block: new Int32Array(n),
    dead: new Uint8Array(n),
    litBelow: new Int32Array(n + 1),
  };
  for (const position of layout.dead) slit.dead[position - 1] = 1;
  let i = 0;
  layout.blocks.forEach((count, b) => {
    for (let k = 0; k < count; k++, i++) {
      const gap = k === 0 && b > 0 ? gaps[b - 1] / layout.pitch : 0;
      slit.at[i] = i === 0 ? 0 : slit.at[i - 1] + 1 + gap;
      slit.gapsPassed[i] = (i === 0 ? 0 : slit.gapsPassed[i - 1]) + gap;
      slit.block[i] = b + 1;
      slit.litBelow[i + 1] = slit.litBelow[i] + (slit.dead[i] ? 0 : 1);
    }
  });
  return slit;
}
