/** Scenes that come with the package, as the TOML text that a person would write. */

/** A bench spectrograph with 100 crowded fibres and everything that makes life hard. */
const DEMO = `name = "bench spectrograph, red arm"
seed = 41

[detector]
size = [1200, 640]            # FITS axes 1 and 2
dispersion_axis = 1
saturation = 65535            # ADU
dark = 0.0015                 # e-/s per pixel
response_rms = 0.01
bias_pattern = 0.5            # ADU
bad_columns = [287, 911]      # from 1

[[detector.amplifier]]
gain = 1.18                   # e-/ADU
read_noise = 2.9              # e-
bias = 1012                   # ADU
drift = 1.5                   # ADU along the readout
overscan = 32                 # columns
place = "[1:600,1:640]"

[[detector.amplifier]]
gain = 1.24
read_noise = 3.3
bias = 987
drift = 1.2
overscan = 32
place = "[601:1200,1:640]"

[slit]
blocks = [20, 20, 20, 20, 20]
pitch = 5.1                   # px
gap = [17, 16.5, 17, 16.5]    # px beside one pitch
dead = [8, 41, 77]
sky = [3, 16, 27, 38, 49, 58, 69, 83, 96]

[tramlines]                   # px: Legendre terms over the columns
tilt = 1.8
fan = 0.6
bow = 3.2
bow_fan = 1.1
curl = -0.25
own_place = 0.06              # rms from fibre to fibre
own_tilt = 0.03
own_bow = 0.02

[profile]
fwhm = 2.35                   # px, of the core
tilt = 0.03
bow = 0.04
across = -0.02
across_bow = 0.05
own_width = 0.02
second_share = 0.14
second_width = 1.55
second_offset = 0.22
second_tilt = 0.15
second_across = -0.12
wing_share = 0.02
wing = "exponential"
wing_scale = 4.2              # px
reach = 55

[wavelength]
range = [7350, 5500]          # air, angstrom
curve = 14
cubic = -2
slit_bow = 1.5
own_place = 0.15              # px
fwhm = 2.3
lamps = ["Ne", "Ar", "Hg", "Cu"]

[light]
throughput_rms = 0.07
throughput_slope = 0.08
flat_rate = 2600              # e-/s per column
arc_rate = 5000               # e-/s in the brightest line
detector_flat_rate = 2000     # e-/s per pixel
scattered_share = 0.03

[science]
faintest = 10                 # e- per column in 900 s
brightest = 1e5
seconds = 900
sky_level = 5
sky_line = 6000

[cosmic_rays]
rate = 180                    # hits in 1000 s
length = 5                    # px
electrons = 2500

[[exposure]]
name = "bias_01"
kind = "bias"
[[exposure]]
name = "bias_02"
kind = "bias"
[[exposure]]
name = "dflat_01"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "dflat_02"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "fflat_01"
kind = "fibre-flat"
seconds = 12
[[exposure]]
name = "fflat_02"
kind = "fibre-flat"
seconds = 12
[[exposure]]
name = "arc_01"
kind = "arc"
seconds = 20
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
object = "crowded field"
[[exposure]]
name = "sci_02"
kind = "science"
seconds = 900
object = "crowded field"
shift = 0.05
`;

/** Pure Gaussians on a perfect detector: an extraction that is handed the truth must reach the theoretical limit. */
const CLEAN = `name = "clean bench"
seed = 7
clean = true

[detector]
size = [400, 330]

[[detector.amplifier]]
gain = 1.1
read_noise = 3
bias = 1000
overscan = 24

[slit]
blocks = [20, 20, 20]
pitch = 4.9
gap = 6
dead = [11]

[tramlines]
tilt = 1.4
fan = 0.5
bow = 2.6
bow_fan = 0.9
curl = -0.3
own_place = 0.06
own_tilt = 0.03
own_bow = 0.02

[profile]
fwhm = 2.4
tilt = 0.04
bow = 0.05
across = -0.03
across_bow = 0.04
own_width = 0.02

[wavelength]
range = [6100, 6700]
fwhm = 2.2

[light]
throughput_rms = 0.05
throughput_slope = 0.05
flat_rate = 2500

[science]
faintest = 10
brightest = 1e5

[[exposure]]
name = "fflat_01"
kind = "fibre-flat"
seconds = 12
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
`;

export const SCENES: Record<"demo" | "clean", string> = { demo: DEMO, clean: CLEAN };
