export { localDesign, localSystem, solveLocal } from "../../reference/shapeColumn.js";
export type { Lines } from "../../reference/shapeProfiles.js";
