"""Time the echo geometry of many positions.

    python tests/benchmarks/bench_echo.py [--positions 1000000] [--runs 3]

Prints the least seconds of each function over the runs, one core.
"""

from __future__ import annotations

import argparse
import time

import numpy as np

from latelight.echo.brightness import thin_sheet_brightness_mag
from latelight.echo.constants import LIGHT_PC_PER_YEAR
from latelight.echo.geometry import (
    angle_deg,
    depth_pc,
    scattering_angle_deg,
    source_distance_pc,
    speed_arcsec_yr,
)
from latelight.echo.inversion import age_and_depth, sheet_slope
from latelight.echo.profile_width import profile_width
from latelight.echo.viewing import viewing_direction


def jobs(n):
    """Return what is timed: name and function without arguments."""
    rng = np.random.default_rng(1)
    theta = 10.0 ** rng.uniform(-3, 1, n)
    distance = 10.0 ** rng.uniform(2.5, 5, n)
    rho_years = np.radians(theta) * distance / LIGHT_PC_PER_YEAR
    age = rho_years * 10.0 ** rng.uniform(-1.0, 0.5, n)
    place = (theta, age, distance)
    turned = rng.uniform(0, 360, n)
    depth, speed = depth_pc(*place), speed_arcsec_yr(*place)
    return {
        "depth_pc": lambda: depth_pc(*place),
        "source_distance_pc": lambda: source_distance_pc(*place),
        "scattering_angle_deg": lambda: scattering_angle_deg(*place),
        "speed_arcsec_yr": lambda: speed_arcsec_yr(*place),
        "angle_deg": lambda: angle_deg(depth, age, distance),
        "age_and_depth": lambda: age_and_depth(theta, speed, distance),
        "sheet_slope": lambda: sheet_slope(*place, speed_arcsec_yr=speed),
        "viewing_direction": lambda: viewing_direction(theta, turned, age, distance),
        "profile_width": lambda: profile_width(*place, duration_yr=0.1),
        "thin_sheet_brightness_mag": lambda: thin_sheet_brightness_mag(
            *place, peak_mag=0.0, scattering_depth=0.1, asymmetry=0.5
        ),
    }


def main():
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--positions", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=3)
    options = parser.parse_args()
    print(f"{options.positions} positions, seconds")
    for name, job in jobs(options.positions).items():
        seconds = []
        for _ in range(options.runs):
            start = time.perf_counter()
            job()
            seconds.append(time.perf_counter() - start)
        print(f"  {name:<28}{min(seconds):8.3f}")


if __name__ == "__main__":
    main()
