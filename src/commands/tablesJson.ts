/** What tables prints. */
import { z } from "zod";

export const tablesKeys = {
  folder: z.string(),
  spectra: z.string().describe("the file's name"),
  form: z.enum(["ecsv", "fits"]),
  columns: z.array(z.string()).describe("of each table of a fibre"),
  tables: z.array(
    z.strictObject({
      file: z.string().describe("in the folder"),
      fibres: z.array(z.int().min(1)).describe("slit positions, from 1; several for a target"),
      target: z.string().nullable(),
      points: z.int().min(0),
      usable: z.int().min(0),
    }),
  ),
  leftOut: z.array(z.int().min(1)).describe("slit positions without light"),
};
