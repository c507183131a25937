export { localDesign, localSystem } from "../../reference/localSystem.js";
export { solveLocal } from "../../reference/shapeColumn.js";
export type { Lines } from "../../reference/shapeProfiles.js";
