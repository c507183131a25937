export { backgroundColumn } from "../../reference/shapeBackground.js";
export { settleColumn } from "../../reference/shapeColumn.js";
export { wholeProfiles } from "../../reference/shapeProfiles.js";
