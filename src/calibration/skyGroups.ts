/** Lines of the night sky that brighten and fade together, as wavelengths in air, Å: oxygen and sodium each on their own, hydroxyl
 * band by band. From memory (Osterbrock et al. 1996, PASP 108, 277); the edges lie where no strong line is, and a line taken for the
 * next band's gets that band's factor. */
export interface SkyGroup {
  name: string;
  windows: [number, number][];
}

export const SKY_GROUPS: readonly SkyGroup[] = [
  { name: "O I 5577", windows: [[5571, 5584]] },
  { name: "Na I", windows: [[5884, 5902]] },
  {
    name: "O I 6300",
    windows: [
      [6294, 6307],
      [6357, 6371],
    ],
  },
  {
    name: "OH 9-3",
    windows: [
      [6220, 6294],
      [6307, 6357],
      [6371, 6460],
    ],
  },
  { name: "OH 6-1", windows: [[6460, 6620]] },
  { name: "OH 7-2", windows: [[6820, 7040]] },
  { name: "OH 8-3", windows: [[7230, 7560]] },
  { name: "OH 9-4", windows: [[7700, 7885]] },
  { name: "OH 5-1", windows: [[7885, 8150]] },
  { name: "OH 6-2", windows: [[8260, 8600]] },
  { name: "OH 7-3", windows: [[8700, 9150]] },
  { name: "OH 8-4", windows: [[9270, 9730]] },
];
