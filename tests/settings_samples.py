"""Settings files that are right, for tests that put one mistake into them."""

from __future__ import annotations

BENCH = """\
format = 1
name = "Test bench"
[time]
kind = "virtual"
start_utc = 2031-02-11T18:00:00Z
[optics]
mount = "plane"
groove_density_per_mm = 1200.0
ruled_width_mm = 96.0
focal_length_mm = 870.0
included_angle_deg = 22.0
order = 1
entrance_slit_um = 20.0
exit_slit_um = 20.0
[scale]
relative_uncertainty = 2e-5
[shape]
allowance = 0.01
[drive]
factory = "collections:OrderedDict"
steps_per_radian = 1.1e6
zero_order_steps = 0
lowest_steps = -1000
highest_steps = 900000
backlash_steps = 400
settle_s = 0.05
microstep_period_steps = 64
move_timeout_s = 60.0
[detector]
factory = "collections:Counter"
dead_time_ns = 30.0
dead_time_uncertainty_ns = 2.0
highest_rate_per_s = 2e6
longest_gate_s = 1.0
[shutter]
factory = "collections:deque"
"""
TABLE = (
    BENCH[: BENCH.index("mount")]
    + 'mount = "table"\nspectrum = "s.csv"\n'
    + BENCH[BENCH.index("[scale]") :].replace("steps_per_radian = 1.1e6\nzero_order_steps = 0\n", "")
).replace("lowest_steps = -1000", "lowest_steps = 0")

TARGET = """\
format = 1
name = "Hg 313 nm pair"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 4.0
[model]
line_fwhm_pm = 1.5
known_lines_air_nm = [313.9]
[sweep]
dwell_s = 0.2
step_pm = 2.0
[goal]
separation_uncertainty_pm = 0.5
[goal.decide]
false_alarm = 1e-3
[limits]
time_s = 1800.0
light_s = 900.0
"""

FILTERS = """\
[[filters]]
name = "ultraviolet"
shortest_nm = 240.0
longest_nm = 390.0
[[filters]]
name = "long-pass 450"
shortest_nm = 450.0
longest_nm = 1100.0
"""

EQUIPPED = (
    BENCH
    + FILTERS
    + """\
[filter]
factory = "collections:deque"
[lamp]
factory = "collections:deque"
positions = ["mercury", "cadmium"]
[slits]
factory = "collections:deque"
narrowest_um = 5.0
widest_um = 200.0
[reference]
factory = "collections:Counter"
dead_time_ns = 30.0
dark_rate_per_s = 5.0
[by_hand]
high_voltage_v = 950.0
gain = 1.0
"""
)
"""Everything that a motor can set is set by one."""

BY_HAND = (
    BENCH
    + FILTERS
    + """\
[[drive.periodic_errors]]
name = "worm"
period_steps = 80000.0
amplitude_steps = 1.5
[by_hand]
filter = "ultraviolet"
lamp = "mercury"
lamp_current_a = 0.4
lamp_serial = "EL-4471"
"""
)
"""Everything is set by a person."""

CONCAVE = BENCH.replace(
    """\
mount = "plane"
groove_density_per_mm = 1200.0
ruled_width_mm = 96.0
focal_length_mm = 870.0
included_angle_deg = 22.0
""",
    """\
mount = "concave"
groove_density_per_mm = 568.4
ruled_width_mm = 50.0
radius_mm = 1000.0
included_angle_deg = 30.0
focused_nm = 313.2
focused_order = 1
""",
)

LITTROW = (
    BENCH.replace('mount = "plane"', 'mount = "littrow"\noff_plane_angle_deg = 0.6')
    .replace("included_angle_deg = 22.0\n", "")
    .replace("steps_per_radian = 1.1e6", 'kind = "sine-bar"\nsteps_per_unit_sine = 1.1e6')
    .replace(
        "dead_time_ns = 30.0\ndead_time_uncertainty_ns = 2.0\nhighest_rate_per_s = 2e6\n",
        """\
kind = "analogue"
charge_unit_c = 1e-14
highest_current_a = 5e-7
read_noise_a = 1e-12
shot_noise_c = 1.92e-13
""",
    )
)


def changed(text: str, old: str, new: str) -> str:
    """The text with its first `old` replaced."""
    assert text.count(old) >= 1, f"the sample file no longer holds {old!r}"
    return text.replace(old, new, 1)
