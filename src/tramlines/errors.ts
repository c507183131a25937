/** A flat that cannot be traced: one sentence with what was found, what was expected and the remedy. */
export class TraceError extends Error {
  override readonly name: string = "TraceError";
}

/** Fibres that cannot be named with certainty. Thrown rather than guessed: a fibre named wrongly by one is the worst
 * error that a tracing can make. */
export class NamingError extends TraceError {
  override readonly name: string = "NamingError";
}
