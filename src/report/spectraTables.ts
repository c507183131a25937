/** One table a fibre, or a target, for those who want a spectrum on its own: what an HDU's row holds, column by column.
 *
 *     column       from 1, of the product's images
 *     wavelength   Å, where calibrated; its medium is in the metadata
 *     flux, flux_error, flags
 *     sky          where it was taken off
 *     covariance   with the next row, where neighbours share noise (rebinned spectra) */
import type { SpectraProduct } from "../calibration/spectraProduct.js";
import { positionColumn } from "../calibration/spectraProduct.js";
import { Flag, UNUSABLE } from "../extraction/spectra.js";
import { sumFibres } from "../extraction/targets.js";
import type { OutputHdu } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import { type EcsvColumn, type EcsvMeta, type EcsvType, ecsv } from "./ecsv.js";

export interface SpectrumTable {
  /** Without its ending. */
  file: string;
  /** Slit positions, from 1. */
  fibres: number[];
  target?: string;
  columns: EcsvColumn[];
  meta: EcsvMeta;
  usable: number;
}

const KEPT = ["OBJECT", "EXPTIME", "DATE-OBS", "NCOMBINE", "EXPTOTAL"];

/** Tables of `fibres` (slit positions, from 1). */
export function fibreTables(product: SpectraProduct, fibres: number[]): SpectrumTable[] {
  const { spectra, wavelengths, sky, columnCovariance } = product;
  const { nx } = spectra;
  const digits = String(spectra.nFibre).length;
  const states = positionColumn(product, "STATE");
  return fibres.map((fibre) => {
    const row = <T extends Float32Array | Float64Array | Int32Array>(image: T) =>
      image.subarray((fibre - 1) * nx, fibre * nx) as T;
    const columns = spectrumColumns(product, {
      wavelength: wavelengths && row(wavelengths.image),
      ...{ flux: row(spectra.flux), variance: row(spectra.variance), flags: row(spectra.flags) },
      sky: sky && row(sky),
      covariance: columnCovariance && row(columnCovariance),
    });
    return {
      file: `fibre_${String(fibre).padStart(digits, "0")}`,
      fibres: [fibre],
      columns,
      meta: [
        ...commonMeta(product),
        ["fibre", fibre],
        ...(states ? ([["state", String(states[fibre - 1])]] as EcsvMeta) : []),
      ],
      usable: usablePoints(row(spectra.flags), row(spectra.flux)),
    };
  });
}

/** Tables of the product's targets. Where their fibres' wavelengths differ by over a tenth of a pixel the sum mixes them, and
 * has no wavelength: rebinned spectra have. */
export function targetTables(product: SpectraProduct): SpectrumTable[] {
  const { spectra } = product;
  const { nx } = spectra;
  const sums = sumFibres(
    spectra,
    product.targets.map(({ target }) => target),
  );
  return sums.targets.map(({ name }, i) => {
    const row = <T extends Float64Array | Int32Array>(image: T) => image.subarray(i * nx, (i + 1) * nx) as T;
    const columns = spectrumColumns(product, {
      wavelength: product.wavelengths && sharedWavelengths(product, sums.used[i]),
      ...{ flux: row(sums.flux), variance: row(sums.variance), flags: row(sums.flags) },
    });
    return {
      file: `target_${name.replace(/[^A-Za-z0-9+-]+/g, "_")}`,
      ...{ fibres: sums.used[i], target: name, columns },
      meta: [...commonMeta(product), ["target", name], ["fibres", sums.used[i].join(",")]],
      usable: usablePoints(row(sums.flags), row(sums.flux)),
    };
  });
}

/** Mean over the fibres; NaN where they differ by over a tenth of a pixel. */
function sharedWavelengths({ wavelengths, spectra: { nx } }: SpectraProduct, fibres: number[]): Float64Array {
  const { image } = wavelengths!;
  return Float64Array.from({ length: nx }, (_, x) => {
    const own = fibres.map((fibre) => image[(fibre - 1) * nx + x]);
    const next = x + 1 < nx ? 1 : -1;
    const pixel = Math.abs(image[(fibres[0] - 1) * nx + x + next] - own[0]);
    const mean = own.reduce((a, b) => a + b, 0) / own.length;
    return Math.max(...own) - Math.min(...own) <= 0.1 * pixel ? mean : Number.NaN;
  });
}

interface Rows {
  wavelength?: Float64Array | undefined;
  flux: ArrayLike<number>;
  variance: ArrayLike<number>;
  flags: Int32Array;
  sky?: Float32Array | undefined;
  covariance?: Float32Array | undefined;
}

function spectrumColumns({ rebinned, wavelengths }: SpectraProduct, rows: Rows): EcsvColumn[] {
  const per = rebinned ? "bin" : "column";
  const column = (
    name: string,
    type: EcsvType,
    unit: string | undefined,
    description: string,
    data: ArrayLike<number> | undefined,
  ): EcsvColumn[] => (data === undefined ? [] : [{ name, type, unit, description, data }]);
  const numbers = Int32Array.from(rows.flags, (_, i) => i + 1);
  const error = Float32Array.from(rows.variance, (value) => Math.sqrt(value));
  const medium = wavelengths?.medium;
  return [
    ...column("column", "int32", undefined, `${per} of the product's images, from 1`, numbers),
    ...column("wavelength", "float64", "Angstrom", `middle of the ${per}, in ${medium}`, rows.wavelength),
    ...column("flux", "float32", "electron", `per ${per}`, Float32Array.from(rows.flux)),
    ...column("flux_error", "float32", "electron", "standard error of flux", error),
    ...column("flags", "int32", undefined, `bits; not to be trusted from ${Flag.saturated} on`, rows.flags),
    ...column("sky", "float32", "electron", "sky light taken off", rows.sky),
    ...column("covariance", "float32", "electron2", "of flux with the next row's", rows.covariance),
  ];
}

function commonMeta({ name, wavelengths, primaryHeader, rebinned }: SpectraProduct): EcsvMeta {
  const kept = KEPT.flatMap((keyword): EcsvMeta => {
    const value = primaryHeader.get(keyword);
    return typeof value === "string" || typeof value === "number" ? [[keyword, value]] : [];
  });
  return [
    ["spectra", name],
    ...(wavelengths ? ([["medium", wavelengths.medium]] as EcsvMeta) : []),
    ["rebinned", rebinned],
    ...kept,
  ];
}

function usablePoints(flags: Int32Array, flux: ArrayLike<number>): number {
  return flags.reduce((n, bits, i) => n + ((bits & UNUSABLE) === 0 && Number.isFinite(flux[i]) ? 1 : 0), 0);
}

export function ecsvText({ columns, meta }: SpectrumTable): string {
  return ecsv(columns, meta);
}

const FORMATS: Record<EcsvType, string> = { int32: "1J", float32: "1E", float64: "1D" };

/** The table as the one extension of a FITS file. `history`: cards. */
export function tableHdus({ columns, meta }: SpectrumTable, history: Card[]): OutputHdu[] {
  return [
    { kind: "primary", header: history },
    {
      kind: "table",
      name: "SPECTRUM",
      columns: columns.map(({ name, type, unit, data }) => ({ name, format: FORMATS[type], unit, data })),
      cards: [
        ...meta.map(([key, value]) => ({ keyword: key.toUpperCase(), value, comment: "" })),
        ...columns.map(({ name, description }) => ({ keyword: "COMMENT", comment: `${name}: ${description}` })),
      ],
    },
  ];
}
