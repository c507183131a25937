/** Sentences for people, each once. */

/** One of each, in order. What was said of several frames in the same words is said once, of all of them. */
export function oneOfEach(sentences: string[]): string[] {
  const saidOf = new Map<string, string[]>();
  for (const sentence of sentences) {
    const end = sentence.indexOf(": ");
    const [name, text] = end < 0 ? ["", sentence] : [sentence.slice(0, end), sentence.slice(end)];
    const names = saidOf.get(text) ?? [];
    if (!names.includes(name)) saidOf.set(text, [...names, name]);
  }
  return Array.from(saidOf, ([text, names]) => {
    const more = names.length > 4 ? [...names.slice(0, 3), `${names.length - 3} more`] : names;
    return `${more.join(", ")}${text}`;
  });
}
