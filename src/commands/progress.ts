/** A progress bar on standard error, for a person at a terminal only. */
import type { SingleBar } from "cli-progress";

export interface Progress {
  /** Begins the next part of the work. */
  stage(label: string): void;
  /** Share of it that is done, 0 to 1. */
  share(done: number): void;
  /** Takes the bar away. */
  end(): void;
}

const silent: Progress = { stage() {}, share() {}, end() {} };

export async function openProgress(quiet: boolean): Promise<Progress> {
  if (quiet || !process.stderr.isTTY) return silent;
  const { default: progress } = await import("cli-progress");
  let bar: SingleBar | undefined;
  const end = () => {
    bar?.stop();
    bar = undefined;
  };
  return {
    stage(label) {
      end();
      bar = new progress.SingleBar({
        format: `${label.padEnd(28)} {bar} {percentage} %`,
        stream: process.stderr,
        clearOnComplete: true,
        hideCursor: false,
        // An interrupt ends the program at once; a bar must not swallow it.
        gracefulExit: false,
        linewrap: true,
      });
      bar.start(100, 0);
    },
    share(done) {
      bar?.update(Math.round(100 * done));
    },
    end,
  };
}
