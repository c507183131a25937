/** Entry of the command. */
import { runCommandLine } from "./program.js";

process.stdout.on("error", (error: NodeJS.ErrnoException) => {
  // Whoever reads our output may have seen enough of it: that is no error.
  if (error.code === "EPIPE") process.exit();
  process.stderr.write(`hatchel: standard output: writing failed (${error.code}); make room or write elsewhere.\n`);
  process.exit(1);
});
// Nobody listens: there is nobody to tell.
process.stderr.on("error", () => {});

process.exitCode = await runCommandLine(process.argv.slice(2));
