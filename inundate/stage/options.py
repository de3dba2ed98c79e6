"""Settings of a stage record, and the names of its flags and quality words."""

from __future__ import annotations

from dataclasses import dataclass

#: What is said of a single reading; the position is its code.
FLAGS = (
    "good",
    "no_value",
    "no_barometer",
    "implausible",
    "spike",
    "out_of_water",
    "flat",
    "ice",
    "noise",
    "at_or_below_sensor",
    "outside_validity",
)
FLAG = {name: code for code, name in enumerate(FLAGS)}
#: What is said of a day: nothing changed; drift or a sized step taken off; between a step that only the record shows
#: and the next check; censored; partly frozen; to be looked at.
QUALITIES = ("good", "corrected", "bridged", "at_or_below_sensor", "ice", "suspect")


@dataclass(frozen=True, slots=True)
class StageOptions:
    """Settings of :func:`inundate.stage.daily_stage`.

    Attributes
    ----------
    barometer_hole_h : float
        Widest hole in the barometer (hours) that may be interpolated.
    barometer_elevation_m : float, optional
        Elevation of the barometer above sea level; with the registry's elevation_m, air pressure is carried to the
        logger by the standard atmosphere.
    water_temperature_c : float
        For density where a logger has no temperature.
    sensor_sd_m : float
        Accuracy (sd) of a sensor's zero where the registry has no sensor_sd_m. Common practice, no source: about
        0.05 % of a 10 m range.
    height_sd_m : float
        Uncertainty (sd) of height_m where the registry has no height_sd_m. Common practice, no source.
    check_sd_m : float
        Uncertainty (sd) of a field check without sd_m. Common practice, no source.
    least_step_m : float
        Smallest sudden change of level that is looked at as a moved sensor.
    check_reach_h : float
        A check is compared with readings at most so far from it (hours).
    """

    barometer_hole_h: float = 3.0
    barometer_elevation_m: float | None = None
    water_temperature_c: float = 10.0
    sensor_sd_m: float = 0.005
    height_sd_m: float = 0.01
    check_sd_m: float = 0.01
    least_step_m: float = 0.015
    check_reach_h: float = 3.0
