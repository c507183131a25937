/** The known word nearest to a mistyped one. */

/** Fewest insertions, deletions and exchanges of a letter that turn one word into the other (Levenshtein 1966). */
export function editDistance(a: string, b: string): number {
  let row = Array.from({ length: b.length + 1 }, (_, j) => j);
  for (let i = 1; i <= a.length; i++) {
    const next = [i];
    for (let j = 1; j <= b.length; j++) {
      const exchanged = row[j - 1] + (a[i - 1] === b[j - 1] ? 0 : 1);
      next.push(Math.min(exchanged, row[j] + 1, next[j - 1] + 1));
    }
    row = next;
  }
  return row[b.length];
}

/** The known key that a reader most likely meant; undefined when none is near (over 2/5 of its letters differ). */
export function nearestKey(key: string, known: string[]): string | undefined {
  const plain = (word: string) => word.toLowerCase().replace(/[-_ ]/g, "");
  const scored = known.map((word) => ({ word, distance: editDistance(plain(key), plain(word)) }));
  scored.sort((a, b) => a.distance - b.distance);
  const best = scored[0];
  return best && best.distance <= 0.4 * Math.max(3, plain(best.word).length) ? best.word : undefined;
}
