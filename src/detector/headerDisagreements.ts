/** Gain and read noise as given against as measured: a wrong one makes every error bar lie. */
import type { Region } from "./assemble.js";

/** Off by more than this, and by more than this many of the measurement's σ, is called out. */
const MOST_OFF = 0.1;
const SURE_SIGMAS = 4;

export interface Measured {
  value: number;
  error: number;
}

/** Does a value differ from its measurement by over 10 % beyond doubt? */
export function disagrees(given: number, measured: Measured): boolean {
  if (!Number.isFinite(given) || !Number.isFinite(measured.value)) return false;
  const off = Math.abs(given - measured.value);
  return off > MOST_OFF * measured.value && off > SURE_SIGMAS * measured.error;
}

/** One sentence: what is given, what is measured, and what error bars `tooLarge` times the true ones come of it. */
export function disagreement(
  name: string,
  amplifier: number,
  what: "gain" | "read noise",
  given: number,
  measured: Measured,
  tooLarge: number,
): string {
  const unit = what === "gain" ? "e⁻/ADU" : "e⁻";
  const digits = Math.max(2, 1 - Math.floor(orderOf(measured.error)));
  const light = what === "gain" ? "bright" : "faint";
  const fluxes = what === "gain" ? ` and every flux ${timesOff(given / measured.value)}` : "";
  return `${name}: the ${what} of amplifier ${amplifier} is given as ${Number(given.toPrecision(6))} ${unit}, but ${measured.value.toFixed(digits)} ± ${measured.error.toFixed(digits)} ${unit} is measured; it makes the error bars of ${light} light ${timesOff(tooLarge)}${fluxes}, so give the right one in the spectrograph file.`;
}

function timesOff(ratio: number): string {
  return ratio > 1 ? `${ratio.toFixed(2)} times too large` : `${(1 / ratio).toFixed(2)} times too small`;
}

/** Read noise of each amplifier against its overscan. Converters add a twelfth of a count squared; that is part of it. */
export function headerDisagreements(name: string, regions: Region[]): string[] {
  return regions.flatMap(({ amplifier, overscan }) => {
    if (overscan === undefined || !(overscan.readNoiseAdu > 0)) return [];
    const measured = {
      value: amplifier.gain * overscan.readNoiseAdu,
      error: amplifier.gain * overscan.readNoiseErrorAdu,
    };
    if (!disagrees(amplifier.readNoise, measured)) return [];
    const tooLarge = amplifier.readNoise / measured.value;
    return [disagreement(name, amplifier.number, "read noise", amplifier.readNoise, measured, tooLarge)];
  });
}

/** Power of ten of a number's first digit. */
function orderOf(value: number): number {
  return value > 0 && Number.isFinite(value) ? Number(value.toExponential().split("e")[1]) : 0;
}
