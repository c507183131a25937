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

/** "gain of amplifier 1 is 1.3 e⁻/ADU, but 1.18 ± 0.01 was measured": one sentence. */
export function disagreement(
  name: string,
  amplifier: number,
  what: "gain" | "read noise",
  given: number,
  measured: Measured,
): string {
  const unit = what === "gain" ? "e⁻/ADU" : "e⁻";
  const digits = Math.max(2, 1 - Math.floor(orderOf(measured.error)));
  return `${name}: the ${what} of amplifier ${amplifier} is given as ${Number(given.toPrecision(6))} ${unit}, but ${measured.value.toFixed(digits)} ± ${measured.error.toFixed(digits)} ${unit} is measured; every error bar hangs on it, so give the right one in the spectrograph file.`;
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
    return [disagreement(name, amplifier.number, "read noise", amplifier.readNoise, measured)];
  });
}

/** Power of ten of a number's first digit. */
function orderOf(value: number): number {
  return value > 0 && Number.isFinite(value) ? Number(value.toExponential().split("e")[1]) : 0;
}
