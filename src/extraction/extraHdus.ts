/** What a spectra product holds beyond the spectra, on request: cross-talk, rejected pixels, scattered light, targets.
 *
 *     CROSSTALK        image, NAXIS1 = sampled column, NAXIS2 = (2·reach + 1) rows a slit position: row k·(2·reach+1) + j + reach
 *                      (from 0) holds C[k][k + j], the share of the light of position k + j that k's estimator counts
 *     CROSSTALK_MEAN   image, NAXIS1 = j + reach, NAXIS2 = slit position: the same, mean over the columns
 *     CROSSTALK_SEEN   table, a row a dark fibre beside a lit one: what frames with single lit fibres show
 *     REJECTED         image of the frame: 8 rejected as a cosmic ray, 32 went with a neighbour
 *     SCATTERED        image of the frame, e⁻ per pixel
 *     TARGETS          table, a row a target
 *
 * Images of the frame lie as the assembled frame does in the raw file, whichever way dispersion runs. */
import type { Frame } from "../detector/frame.js";
import type { OutputHdu, PixelArray } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import { MaskBit } from "../reference/bits.js";
import type { CrosstalkMatrix } from "./crosstalkMatrix.js";
import type { Extraction } from "./extract.js";
import { backgroundImage } from "./modelColumn.js";
import type { SingleFibreCheck } from "./singleFibre.js";
import type { TargetSpectra } from "./targets.js";

export function crosstalkHdus(matrix: CrosstalkMatrix, corrected: boolean): OutputHdu[] {
  const { nFibre, reach, columns, estimator, halfAperture } = matrix;
  const width = 2 * reach + 1;
  const cards: Card[] = [
    { keyword: "XTESTIM", value: estimator, comment: "estimator that this holds for" },
    { keyword: "XTFROM", value: "model", comment: "the profile model, on model variances" },
    { keyword: "XTREACH", value: reach, comment: "slit positions told of to each side" },
    { keyword: "XTCOL1", value: columns[0] + 1, comment: "first sampled column, from 1" },
    { keyword: "XTSTEP", value: columns.length > 1 ? columns[1] - columns[0] : 0, comment: "columns between samples" },
    { keyword: "XTSOLVED", value: corrected, comment: "taken out of FLUX" },
    ...(Number.isNaN(halfAperture)
      ? []
      : [{ keyword: "XTHALF", value: halfAperture, comment: "[pixel] half of the aperture" }]),
    {
      keyword: "COMMENT",
      comment:
        "Share of the light of slit position k+j that the estimator of position k counts; NaN where one of the two is dead or outside.",
    },
  ];
  const meaning = (comment: string): Card => ({ keyword: "COMMENT", comment });
  return [
    {
      kind: "image",
      name: "CROSSTALK",
      nx: columns.length,
      ny: nFibre * width,
      data: Float32Array.from(matrix.values),
      cards: [
        ...cards,
        meaning("Row (k-1)*(2*XTREACH+1) + j + XTREACH + 1, all from 1; axis 1 runs over the sampled columns."),
      ],
    },
    {
      kind: "image",
      name: "CROSSTALK_MEAN",
      nx: width,
      ny: nFibre,
      data: Float32Array.from(matrix.mean),
      cards: [...cards, meaning("Mean over the sampled columns; pixel j + XTREACH + 1 of row k, both from 1.")],
    },
  ];
}

export function seenHdu(checks: SingleFibreCheck[]): OutputHdu {
  const rows = checks.flatMap(({ frame, leaks }) => leaks.map((leak) => ({ frame, ...leak })));
  const numbers = (key: "share" | "error" | "model") => Float64Array.from(rows, (row) => row[key]);
  const fibres = (key: "lit" | "fibre") => Int32Array.from(rows, (row) => row[key]);
  return {
    kind: "table",
    name: "CROSSTALK_SEEN",
    columns: [
      textColumn(
        "FRAME",
        rows.map((row) => row.frame),
      ),
      { name: "LIT", format: "1J", data: fibres("lit") },
      { name: "FIBRE", format: "1J", data: fibres("fibre") },
      { name: "SEEN", format: "1D", data: numbers("share") },
      { name: "ERROR", format: "1D", data: numbers("error") },
      { name: "MODEL", format: "1D", data: numbers("model") },
    ],
    cards: [
      {
        keyword: "COMMENT",
        comment:
          "Light found at FIBRE over that found at LIT, seen in FRAME and by the profile model: C[k][m]/C[m][m].",
      },
    ],
  };
}

export function rejectedHdu({ rejected }: Extraction, frame: Frame): OutputHdu {
  const bits = rejected.map((value) => value & (MaskBit.cosmic | MaskBit.grown));
  const comment = "Bits: 8 rejected as a cosmic ray, 32 went with a rejected neighbour; as the frame lies in the file.";
  return frameImage("REJECTED", frame, bits, undefined, comment);
}

export function scatteredHdu({ fit }: Extraction, frame: Frame): OutputHdu {
  const light = backgroundImage(fit.background, frame.nx, frame.ny);
  return frameImage("SCATTERED", frame, light, "electron", "Scattered light per pixel, as the frame lies in the file.");
}

export function targetsHdu(sums: TargetSpectra, neglected: Float64Array): OutputHdu {
  const { targets, used, nx } = sums;
  return {
    kind: "table",
    name: "TARGETS",
    columns: [
      textColumn(
        "NAME",
        targets.map(({ name }) => name),
      ),
      textColumn(
        "FIBRES",
        targets.map(({ fibres }) => fibres.join(",")),
      ),
      { name: "NFIBRE", format: "1J", data: Int32Array.from(used, (fibres) => fibres.length) },
      { name: "FLUX", format: `${nx}E`, unit: "electron", data: Float32Array.from(sums.flux) },
      { name: "FLUX_VAR", format: `${nx}E`, unit: "electron2", data: Float32Array.from(sums.variance) },
      { name: "FLAGS", format: `${nx}J`, data: sums.flags },
      { name: "NEGLECTED", format: "1D", data: neglected },
    ],
    cards: [
      {
        keyword: "COMMENT",
        comment:
          "Sums over the target's fibres that are not dead (NFIBRE); FLUX_VAR holds covariances of next neighbours. " +
          "NEGLECTED: largest share of the variance that covariances beyond them would add.",
      },
    ],
  };
}

function frameImage(
  name: string,
  frame: Frame,
  data: PixelArray,
  unit: string | undefined,
  comment: string,
): OutputHdu {
  const { nx, ny, geometry } = frame;
  const turned = geometry.dispersionAxis === 2;
  const [axis1, axis2] = turned ? [ny, nx] : [nx, ny];
  const cards = [{ keyword: "COMMENT", comment }];
  return { kind: "image", name, nx: axis1, ny: axis2, data: turned ? transposed(data, nx, ny) : data, unit, cards };
}

/** [ny × nx] → [nx × ny]. */
function transposed(data: PixelArray, nx: number, ny: number): PixelArray {
  const turned = data.slice();
  for (let y = 0; y < ny; y++) for (let x = 0; x < nx; x++) turned[x * ny + y] = data[y * nx + x];
  return turned;
}

/** Fixed width, as FITS tables want it. */
function textColumn(name: string, texts: string[]) {
  return { name, format: `${Math.max(1, ...texts.map((text) => text.length))}A`, data: texts };
}
