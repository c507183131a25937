/** Numbers for JSON, which has no NaN and no infinity: null stands for them. */
export function finite(value: number): number | null {
  return Number.isFinite(value) ? value : null;
}
