"""Pairs of bench and target that fit each other, for tests that put one mistake into them."""

from __future__ import annotations

from settings_samples import BY_HAND, CONCAVE, EQUIPPED, LITTROW

LINE = """\
format = 1
name = "Hg 313 nm pair"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 5.0
[model]
line_fwhm_pm = 1.5
expected_peak_rate_per_s = 400.0
[sweep]
dwell_s = 0.2
step_pm = 2.0
[goal]
separation_uncertainty_pm = 0.5
[goal.decide]
smallest_separation_pm = 25.0
[limits]
time_s = 1800.0
light_s = 1500.0
"""

WITH_LAMP = LINE.replace("[window]", '[setup]\nlamp = "mercury"\nfilter = "ultraviolet"\n[window]')

FOCUSED = """\
format = 1
name = "Hg 313 nm pair"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 5.0
[sweep]
dwell_s = 0.2
[goal]
separation_uncertainty_pm = 2.0
[limits]
time_s = 1800.0
"""

ULTRAVIOLET = '[[filters]]\nname = "uv"\nshortest_nm = 240.0\nlongest_nm = 390.0\n[by_hand]\nfilter = "uv"\n'

SAMPLES = {
    "by_hand": (BY_HAND, LINE),
    "equipped": (EQUIPPED, WITH_LAMP),
    "concave": (CONCAVE + ULTRAVIOLET, FOCUSED),
    "littrow": (LITTROW + ULTRAVIOLET, LINE.replace("step_pm = 2.0\n", "")),
}
"""(bench, target) by name; none of them has a problem or a caution."""
