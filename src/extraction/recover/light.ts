/** Light as the extraction's profiles would have it, column by column: fluxes spread over the pixels. */
import { blockProfiles, columnWeights, nodeShares, type ProfileInput } from "../../reference/profile.js";
import type { Tramlines } from "../../tramlines/tramlines.js";
import type { ExtractionPlan } from "../plan.js";

export class ProfileLight {
  private readonly input: ProfileInput;
  private block: { x0: number; start: Int32Array; profiles: ReturnType<typeof blockProfiles> } | null = null;

  constructor(tramlines: Tramlines, plan: ExtractionPlan) {
    const { nx, ny, degree, profile, legendre } = tramlines;
    const nTrace = degree + 1;
    const nWidth = profile.widthDegree + 1;
    const rows = (all: Float64Array, n: number) =>
      Float64Array.from(plan.active.flatMap((k) => Array.from(all.subarray(k * n, (k + 1) * n))));
    this.input = {
      ...{
        nx,
        ny,
        nFibre: plan.active.length,
        halfWindow: plan.halfWindow + plan.wing,
        wing: 0,
        blockColumns: plan.blockColumns,
      },
      ...{ trace: rows(legendre, nTrace), nTrace, width: rows(profile.sigma, nWidth), nWidth },
      ...(profile.kind === "gaussian" ? {} : { shape: profile.shape }),
    };
  }

  /** Σ flux_k · profile_k in column x: [ny]. `flux`: e⁻ of fibre k at flux[k · stride + at]. */
  column(x: number, flux: Float64Array, stride: number, at = x): Float64Array {
    const { ny, nFibre, halfWindow, blockColumns } = this.input;
    const nWindow = 2 * halfWindow + 1;
    const x0 = x - (x % blockColumns);
    if (this.block?.x0 !== x0) {
      const profiles = blockProfiles(this.input, x0);
      this.block = { x0, start: profiles.start, profiles };
    }
    const { start, profiles } = this.block;
    const weights = columnWeights(profiles, nWindow, nodeShares(blockColumns, x - x0));
    const column = new Float64Array(ny);
    for (let k = 0; k < nFibre; k++) {
      const light = flux[k * stride + at];
      for (let i = 0; i < nWindow; i++) {
        const row = start[k] + i;
        if (row >= 0 && row < ny) column[row] += light * weights[k * nWindow + i];
      }
    }
    return column;
  }
}
