/** Was a frame good? Judged by its own figures and by the other frames of its field. The bounds are common practice: they
 * point to frames worth a look, and decide nothing. */
import type { Facts } from "./task.js";

export type Verdict = "good" | "doubtful" | "bad" | "failed";

/** Shares of spectrum points that can be trusted. */
const FEW_USABLE = 0.5;
const SOME_USABLE = 0.9;
/** Pixels: further, and the flat shows another state of the instrument. */
const FAR_SHIFT = 1;
/** Pixels along dispersion: further, and another arc would serve the frame better. */
const FAR_ZERO_POINT = 1;
/** Scatter of what is left of the sky's lines over what noise explains. */
const SKY_PULL = 1.5;
/** Of the light per second of the field's brightest frame. */
const DIM_SHARE = 0.5;

/** `siblings`: facts of all frames of the field, this one among them. */
export function frameVerdict(facts: Facts, siblings: readonly Facts[]): { verdict: Verdict; reasons: string[] } {
  const usable = facts.usableShare as number;
  const shift = facts.shiftPixels as number | null;
  const percent = `${(100 * usable).toFixed(0)} %`;
  const bad = usable < FEW_USABLE ? [`only ${percent} of its points can be trusted`] : [];
  const doubts: string[] = [];
  if (bad.length === 0 && usable < SOME_USABLE) doubts.push(`only ${percent} of its points can be trusted`);
  if (shift === null) doubts.push("too little light to measure its shift against the flat");
  else if (Math.abs(shift) > FAR_SHIFT) {
    doubts.push(`its light lies ${shift.toFixed(2)} px from the flat's; a flat nearer in time would serve it better`);
  }
  const zero = facts.zeroPointPixels;
  if (typeof zero === "number" && Math.abs(zero) > FAR_ZERO_POINT) {
    doubts.push(`its lines lie ${zero.toFixed(2)} px from the arc's; an arc nearer in time would serve it better`);
  }
  const pull = facts.skyPullAtLines;
  if (typeof pull === "number" && pull > SKY_PULL) {
    doubts.push(`the sky's lines are left with ${pull.toFixed(1)} times the scatter that noise explains`);
  }
  const dim = dimness(facts, siblings);
  if (dim !== undefined) doubts.push(dim);
  return { verdict: bad.length > 0 ? "bad" : doubts.length > 0 ? "doubtful" : "good", reasons: [...bad, ...doubts] };
}

function dimness(facts: Facts, siblings: readonly Facts[]): string | undefined {
  const rates = siblings.map((one) => ({ frame: one.frame as string, rate: rateOf(one) }));
  const brightest = rates.reduce((best, one) => (one.rate > best.rate ? one : best), { frame: "", rate: 0 });
  const share = rateOf(facts) / brightest.rate;
  if (!(brightest.rate > 0) || !(share < DIM_SHARE)) return undefined;
  return `${(100 * Math.max(0, share)).toFixed(0)} % of the light per second of ${brightest.frame}: clouds, or off its field`;
}

/** e⁻ per column and second; NaN when not known. */
function rateOf({ medianElectrons, exposureSeconds }: Facts): number {
  if (typeof medianElectrons !== "number" || typeof exposureSeconds !== "number") return Number.NaN;
  return medianElectrons / exposureSeconds;
}
