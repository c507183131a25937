/** The public library. */

export { historyCards, inputCards } from "./fits/carry.js";
export { encodeFits, type OutputColumn, type OutputHdu, type OutputImage, type PixelArray } from "./fits/encode.js";
export { FitsError, type FitsErrorCode } from "./fits/errors.js";
export { type Card, type CardValue, Header } from "./fits/header.js";
export { formatSection, parseSection, type Section, sectionSize } from "./fits/sections.js";
export { type WriteOptions, writeFits } from "./fits/write.js";
export { loadKernels } from "./kernels/module.js";
