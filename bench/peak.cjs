// Loaded before a command: writes the most memory that the process ever held, in kB, into the file that
// HATCHEL_BENCH_PEAK names. VmHWM and not maxRSS, which a process inherits from the one that started it.
const fs = require("node:fs");

process.on("exit", () => {
  const status = fs.existsSync("/proc/self/status") ? fs.readFileSync("/proc/self/status", "utf8") : "";
  const kilobytes = /^VmHWM:\s*(\d+) kB/m.exec(status)?.[1] ?? String(process.resourceUsage().maxRSS);
  fs.writeFileSync(process.env.HATCHEL_BENCH_PEAK, kilobytes);
});
