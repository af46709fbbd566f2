"""Which keys a mission file takes, as `envflux run --help` lists them.

Written out, because the definitions themselves take a second to load; a test holds the two equal.
"""

from __future__ import annotations

import textwrap

# By heading: keys that must be given, and those that may be.
ORBITS: dict[str, tuple[str, str]] = {
    "circular": ("altitude_km inclination_deg raan_deg epoch", "argument_of_latitude_deg j2"),
    "sun-synchronous": ("altitude_km epoch", "ltan_hours ltdn_hours sun argument_of_latitude_deg"),
    "kepler": (
        "inclination_deg epoch",
        "semi_major_axis_km perigee_altitude_km apogee_altitude_km eccentricity raan_deg arg_perigee_deg "
        "true_anomaly_deg mean_anomaly_deg j2",
    ),
    "undated": ("altitude_km beta_deg", "sun_distance_au"),
    "tle": ("line1 line2", ""),
    "omm": (
        "epoch mean_motion_rev_day eccentricity inclination_deg raan_deg arg_perigee_deg mean_anomaly_deg",
        "bstar mean_motion_dot mean_motion_ddot object_name object_id",
    ),
}
ATTITUDES: dict[str, tuple[str, str]] = {
    "nadir": ("", "roll_deg pitch_deg yaw_deg"),
    "inertial": ("quaternion_wxyz", ""),
    "sun": ("", "axis toward clock_axis"),
    "spinning": ("rate_rpm", "axis about phase_deg averaged direction"),
}
TABLES: dict[str, tuple[str, str]] = {
    "[track]": ("", "revolutions duration_s start step_s"),
    "[coatings.NAME]": (
        "absorptance emittance",
        "absorptance_eol emittance_eol electrical_extraction name source",
    ),
    "[[craft.faces]]": ("name normal area_m2 coating", "back"),
    "[modes.NAME]": ("attitude", "age bound bound_absorptance bound_emittance cells"),
    "[environments.NAME]": (
        "albedo planetary_ir_w_m2",
        "solar_constant_w_m2 name source zenith_correction radiating_radius_km",
    ),
    "[output]": ("", "plots against"),
}

_INDENT, _WIDTH = 23, 100


def listed(keys: dict[str, tuple[str, str]]) -> str:
    """One entry per heading, what may be left out in brackets."""
    entries = []
    for heading, (needed, optional) in keys.items():
        text = ", ".join(needed.split() + ([f"[{', '.join(optional.split())}]"] if optional else []))
        first = f"  {heading:{_INDENT - 2}}"
        entries.append(textwrap.fill(text, _WIDTH, initial_indent=first, subsequent_indent=" " * _INDENT))
    return "\n".join(entries)
