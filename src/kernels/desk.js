/** The desk at which threads meet: 32-bit numbers that all of them see, one desk a workbench.
 *
 *     turn │ open │ atWork │ next │ end │ kernel │ failed │ a job's pointer for each thread …
 *
 * Whoever has work lays it on the desk, opens it, and counts the turn on; threads take tiles by counting `next` up. */
export const Desk = { turn: 0, open: 1, atWork: 2, next: 3, end: 4, kernel: 5, failed: 6, jobs: 7 };

/** The turn that sends the threads away. */
export const CLOSED = -1;
