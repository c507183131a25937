/** What is left of the sky in the fibres that see nothing else, where 0 is the truth: between the sky's lines and at them. */
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { UNUSABLE } from "../../src/extraction/spectra.js";
import { readTable } from "../../src/fits/table.js";
import { median } from "../../src/reference/median.js";

/** Columns from a line's centre: at it within NEAR, between lines beyond FAR. Lines are 2.2 px wide. */
const NEAR = 3;
const FAR = 8;
/** σ; what lies further off is a cosmic ray's. */
const HIT = 6;

export interface SkyLeft {
  /** Mean of what is left between lines ÷ mean sky there. */
  residual: number;
  /** 1.4826 · median |value ÷ its error bar|. */
  between: number;
  /** At lines of S/N below `faint`, and at the others; NaN where there are none. */
  atFaint: number;
  atBright: number;
  nFaint: number;
  nBright: number;
}

/** @param truth the frame's, whose LINES say where each fibre has the sky's lines and with how many electrons.
 * @param skyFibres from 0.
 * @param faint a line's electrons ÷ the error of the sum over NEAR columns either side. */
export async function skyLeft(path: string, truth: string, skyFibres: number[], faint = 100): Promise<SkyLeft> {
  const { spectra, sky } = await readProduct(path);
  const { flux, variance, flags, nx } = spectra;
  const { columns, nRows } = await readTable(truth, "LINES");
  const column = (name: string) => columns.find((one) => one.name === name)!.data;
  const [fibre, centre, electrons, kind] = ["FIBRE", "X", "ELECTRONS", "KIND"].map(column);
  const pulls: Record<"between" | "faint" | "bright", number[]> = { between: [], faint: [], bright: [] };
  let [left, light] = [0, 0];
  for (const k of skyFibres) {
    const own = Array.from({ length: nRows }, (_, i) => i).filter(
      (i) => Number(fibre[i]) === k + 1 && String(kind[i]).trim() === "sky",
    );
    const kinds = new Uint8Array(nx);
    for (const i of own) mark(kinds, Number(centre[i]), FAR, 1);
    for (const i of own) {
      const x = Number(centre[i]);
      let noise = 0;
      for (let j = Math.max(0, Math.ceil(x - NEAR)); j <= Math.min(nx - 1, x + NEAR); j++)
        noise += variance[k * nx + j];
      mark(kinds, x, NEAR, Number(electrons[i]) / Math.sqrt(noise) < faint ? 2 : 3);
    }
    for (let x = 0; x < nx; x++) {
      const at = k * nx + x;
      const pull = flux[at] / Math.sqrt(variance[at]);
      if (Number.isNaN(pull) || (flags[at] & UNUSABLE) !== 0) continue;
      if (kinds[x] >= 2) pulls[kinds[x] === 2 ? "faint" : "bright"].push(pull);
      if (kinds[x] !== 0) continue;
      pulls.between.push(pull);
      if (Math.abs(pull) > HIT) continue;
      left += flux[at];
      light += sky![at];
    }
  }
  return {
    residual: left / light,
    between: spread(pulls.between),
    atFaint: spread(pulls.faint),
    atBright: spread(pulls.bright),
    nFaint: pulls.faint.length,
    nBright: pulls.bright.length,
  };
}

function mark(kinds: Uint8Array, centre: number, reach: number, kind: number): void {
  const last = Math.min(kinds.length - 1, centre + reach);
  for (let x = Math.max(0, Math.ceil(centre - reach)); x <= last; x++) kinds[x] = kind;
}

function spread(pulls: number[]): number {
  return 1.4826 * median(pulls.map(Math.abs));
}
