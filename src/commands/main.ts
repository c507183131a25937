/** Entry of the command. */
import { runCommandLine } from "./program.js";

// Whoever reads our output may have seen enough of it: that is no error.
process.stdout.on("error", (error: NodeJS.ErrnoException) => {
  if (error.code !== "EPIPE") throw error;
  process.exit();
});

process.exitCode = await runCommandLine(process.argv.slice(2));
