/** The program's version, as package.json says. */
import { readFileSync } from "node:fs";

// Both src/commands and dist/commands lie two folders below package.json.
const packageFile = new URL("../../package.json", import.meta.url);

export const version: string = JSON.parse(readFileSync(packageFile, "utf8")).version;
