export declare const Desk: {
  readonly turn: 0;
  readonly open: 1;
  readonly atWork: 2;
  readonly next: 3;
  readonly end: 4;
  readonly kernel: 5;
  readonly failed: 6;
  readonly jobs: 7;
};
export declare const CLOSED: -1;
