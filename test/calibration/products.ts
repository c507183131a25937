/** Spectra products with known content, as files in memory: what calibration hands on to combining and rebinning. */

import { spectrumImages } from "../../src/extraction/file.js";
import { Flag, type Spectra } from "../../src/extraction/spectra.js";
import { encodeFits, type OutputHdu } from "../../src/fits/encode.js";
import type { Card } from "../../src/fits/header.js";

export interface ProductParts {
  spectra: Spectra;
  wavelengths?: Float64Array;
  medium?: string;
  sky?: Float32Array;
  cards?: Card[];
  targets?: { name: string; fibres: number[] }[];
}

/** Spectra whose every value is given by a function of fibre and column, from 0. Variance 1 unless told otherwise. */
export function spectraOf(
  nFibre: number,
  nx: number,
  flux: (k: number, x: number) => number,
  variance: (k: number, x: number) => number = () => 1,
): Spectra {
  const image = (value: (k: number, x: number) => number) =>
    Float64Array.from({ length: nFibre * nx }, (_, i) => value(Math.floor(i / nx), i % nx));
  return {
    ...{ nFibre, nx, method: "joint", crosstalkCorrected: true },
    flux: image(flux),
    variance: image(variance),
    neighbourCovariance: image((k) => (k + 1 < nFibre ? -0.1 : Number.NaN)),
    flags: new Int32Array(nFibre * nx),
    chi2: image(() => 1),
    background: image(() => 2),
  };
}

/** A fibre without light, as extraction leaves it. */
export function kill(spectra: Spectra, k: number): void {
  const { nx } = spectra;
  for (const image of [spectra.flux, spectra.variance, spectra.chi2, spectra.background]) {
    image.fill(Number.NaN, k * nx, (k + 1) * nx);
  }
  spectra.neighbourCovariance.fill(Number.NaN, Math.max(0, k - 1) * nx, (k + 1) * nx);
  spectra.flags.fill(Flag.dead, k * nx, (k + 1) * nx);
}

export function productBytes(parts: ProductParts): Uint8Array {
  const { spectra, wavelengths, medium = "air", sky, cards = [], targets = [] } = parts;
  const { nFibre, nx } = spectra;
  const image = (name: string, unit: string, data: Float32Array | Float64Array, own: Card[] = []): OutputHdu => ({
    ...{ kind: "image", name, unit, data, nx, ny: nFibre, cards: own },
  });
  const dead = (k: number) => (spectra.flags[k * nx] & Flag.dead) !== 0;
  const rows = Array.from({ length: nFibre }, (_, k) => k);
  return encodeFits([
    {
      kind: "primary",
      header: [
        ...cards,
        { keyword: "SPECVERS", value: 1, comment: "" },
        { keyword: "EXMETHOD", value: spectra.method, comment: "" },
        { keyword: "XTALKCOR", value: spectra.crosstalkCorrected, comment: "" },
        { keyword: "TRAMGEOM", value: "0123456789abcdef", comment: "" },
      ],
    },
    ...spectrumImages(spectra),
    ...(wavelengths === undefined
      ? []
      : [image("WAVELENGTH", "Angstrom", wavelengths, [{ keyword: "MEDIUM", value: medium, comment: "" }])]),
    ...(sky === undefined ? [] : [image("SKY", "electron", sky)]),
    {
      kind: "table",
      name: "POSITIONS",
      columns: [
        { name: "FIBRE", format: "1J", data: Int32Array.from(rows, (k) => k + 1) },
        { name: "STATE", format: "8A", data: rows.map((k) => (dead(k) ? "dead" : "lit")) },
        { name: "BLOCK", format: "1J", data: Int32Array.from(rows, () => 1) },
        { name: "ROLE", format: "8A", data: rows.map((k) => (dead(k) ? "spare" : "target")) },
        { name: "THROUGHPUT", format: "1D", data: Float64Array.from(rows, (k) => 1 + 0.01 * k) },
        { name: "MEDIAN_SNR", format: "1D", data: new Float64Array(nFibre) },
        { name: "SHIFT", format: "1D", unit: "pixel", data: new Float64Array(nFibre).fill(0.05) },
      ],
    },
    ...(targets.length === 0
      ? []
      : [
          {
            kind: "table" as const,
            name: "TARGETS",
            columns: [
              { name: "NAME", format: "16A", data: targets.map(({ name }) => name) },
              { name: "FIBRES", format: "32A", data: targets.map(({ fibres }) => fibres.join(",")) },
              { name: "NEGLECTED", format: "1D", data: Float64Array.from(targets, () => 0.0125) },
            ],
          },
        ]),
  ]);
}
