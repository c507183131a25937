/** Tables as text: Enhanced Character Separated Values 1.0 (Astropy Proposal for Enhancement 6): comments that hold columns and
 * metadata in YAML, a line of names, then a line a row with blanks between.
 *
 * Numbers have as many digits as bring back the same bits. */

export type EcsvType = "int32" | "float32" | "float64";

export interface EcsvColumn {
  name: string;
  type: EcsvType;
  unit?: string | undefined;
  description: string;
  data: ArrayLike<number>;
}

export type EcsvMeta = [key: string, value: string | number | boolean][];

/** The whole text. All columns have as many rows as the first. */
export function ecsv(columns: EcsvColumn[], meta: EcsvMeta): string {
  const head = [
    "%ECSV 1.0",
    "---",
    "datatype:",
    ...columns.map(
      ({ name, type, unit, description }) =>
        `- {name: ${name}, ${unit === undefined ? "" : `unit: ${unit}, `}datatype: ${type}, description: ${quoted(description)}}`,
    ),
    ...(meta.length === 0 ? [] : ["meta: !!omap", ...meta.map(([key, value]) => `- {${key}: ${yaml(value)}}`)]),
    "schema: astropy-2.0",
  ].map((line) => `# ${line}`);
  const rows = Array.from({ length: columns[0].data.length }, (_, i) =>
    columns.map(({ type, data }) => digits(data[i], type)).join(" "),
  );
  return `${[...head, columns.map(({ name }) => name).join(" "), ...rows].join("\n")}\n`;
}

/** The fewest digits that bring back the same float32 or float64. */
function digits(value: number, type: EcsvType): string {
  if (Number.isNaN(value)) return "nan";
  // Which the language writes without its sign.
  if (Object.is(value, -0)) return "-0.0";
  if (type === "float32" && Number.isFinite(value)) {
    for (let n = 6; n <= 9; n++) {
      const text = value.toPrecision(n);
      if (Math.fround(Number(text)) === Math.fround(value)) return String(Number(text));
    }
  }
  // The language writes float64 with the fewest digits that bring it back.
  return Number.isFinite(value) ? String(value) : value > 0 ? "inf" : "-inf";
}

function yaml(value: string | number | boolean): string {
  return typeof value === "string" ? quoted(value) : String(value);
}

/** YAML's double-quoted form is JSON's. */
function quoted(text: string): string {
  return JSON.stringify(text);
}
