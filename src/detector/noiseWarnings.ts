/** Gain and read noise against what the given frames themselves say, quickly enough to be asked at every run. */
import type { Spectrograph } from "../spectrograph.js";
import { measureNoise, type NoiseFrames, noiseDisagreements } from "./noise.js";

/** Of each amplifier: a gain is then good to √(2/30 000) = 0.8 %, enough to be sure of 10 %. */
const ENOUGH_PIXELS = 60_000;

/** One sentence for each gain and read noise that is off by over 10 %, and what that does to the error bars.
 *
 * Two frames of a kind are looked at: bias frames for the read noise, flats for the gain. What they cannot tell is passed
 * over in silence, since nothing was asked for; read noise from the overscan is told with each frame. */
export function noiseWarnings({ bias = [], flats = [], zeroLevelAdu }: NoiseFrames, spectrograph?: Spectrograph) {
  if (bias.length < 2 && flats.length < 2) return [];
  const pairs: NoiseFrames = { bias: bias.slice(0, 2), flats: flats.length > 1 ? flats.slice(0, 2) : [] };
  if (zeroLevelAdu) pairs.zeroLevelAdu = zeroLevelAdu;
  const { amplifiers } = measureNoise(pairs, spectrograph, { mostPixels: ENOUGH_PIXELS });
  return amplifiers.flatMap((noise) => noiseDisagreements(pairs, noise, bias.length > 1));
}
