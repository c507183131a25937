/** The library as JavaScript, for tests that need a process of their own (one that may hang, or has pipes). */
import fs from "node:fs";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import ts from "typescript";

const source = fileURLToPath(new URL("../src/", import.meta.url));
const build = fileURLToPath(new URL("../build/", import.meta.url));

/** Translates what FITS in and out needs, as it stands, into a new folder, which the caller removes. */
export function compileForChildren(): string {
  fs.mkdirSync(build, { recursive: true });
  const folder = fs.mkdtempSync(join(build, "child-"));
  for (const part of ["fits", "kernels", "reference"]) {
    fs.mkdirSync(join(folder, part));
    for (const name of fs.readdirSync(join(source, part))) {
      if (name.endsWith(".wasm")) fs.copyFileSync(join(source, part, name), join(folder, part, name));
      if (name.endsWith(".ts")) translate(join(source, part, name), join(folder, part, name.replace(/ts$/, "js")));
    }
  }
  return folder;
}

function translate(from: string, to: string): void {
  const compilerOptions = { module: ts.ModuleKind.ES2022, target: ts.ScriptTarget.ES2022, verbatimModuleSyntax: true };
  fs.writeFileSync(to, ts.transpileModule(fs.readFileSync(from, "utf8"), { compilerOptions }).outputText);
}
