/** Threads that make products, each one at a time, with kernels of its own on one thread. They are taken on when there is work
 * for them. */
import { Worker } from "node:worker_threads";
import type { Facts, Job } from "./task.js";

export interface Answer {
  facts?: Facts;
  /** Why there are none, in one sentence. */
  reason?: string;
}

interface Hand {
  thread: Worker;
  /** Set while it is at work. */
  settle?: ((answer: Answer) => void) | undefined;
}

export class Crew {
  private readonly hands: Hand[] = [];
  private ended = false;

  /** `script`: answers each job with an `Answer`. */
  constructor(private readonly script: URL) {}

  /** Gives the job to a thread that is free, or to one more.
   * @throws Error with the reason, one sentence. */
  async make(job: Job): Promise<Facts> {
    const hand = this.hands.find(({ settle }) => settle === undefined) ?? this.hire();
    const answer = await new Promise<Answer>((settle) => {
      hand.settle = settle;
      hand.thread.postMessage(job);
    });
    if (answer.facts !== undefined) return answer.facts;
    throw new Error(answer.reason ?? "the thread that was at it gave no answer; run again.");
  }

  async end(): Promise<void> {
    this.ended = true;
    await Promise.all(this.hands.map(({ thread }) => thread.terminate()));
  }

  private hire(): Hand {
    const hand: Hand = { thread: new Worker(this.script) };
    this.hands.push(hand);
    const answer = (given: Answer) => {
      const { settle } = hand;
      hand.settle = undefined;
      settle?.(given);
    };
    hand.thread.on("message", answer);
    // Out of memory, most likely: the job fails, and the next one gets a thread of its own.
    hand.thread.on("error", (error: Error) => {
      if (this.ended) return;
      this.hands.splice(this.hands.indexOf(hand), 1);
      const what = error.message.split("\n")[0].replace(/\.$/, "");
      answer({ reason: `the thread that was at it stopped (${what}); free memory, or take fewer --threads.` });
    });
    return hand;
  }
}
