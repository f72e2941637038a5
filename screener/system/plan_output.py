"""A plan of nights as a mapping for JSON and as a file."""

from __future__ import annotations

import datetime
import math
import os
import tempfile
from pathlib import Path
from typing import Any

import numpy as np

from screener.system.schedule import NightPlan

__all__ = ["plan_as_dict", "write_nights"]


def write_nights(path: Path, plan: NightPlan) -> None:
    """Write the plan as ECSV: one row a night, units in the header; write, then rename."""
    from astropy import units as u
    from astropy.table import Table

    def column(name: str) -> list[float]:
        values = [getattr(n, name) for n in plan.nights]
        return [math.nan if v is None else float(v) for v in values]

    table = Table()
    table["rank"] = [n.rank for n in plan.nights]
    table["time"] = np.array(column("time")) * u.d
    table["date"] = [_date(n.time) for n in plan.nights]
    table["information"] = column("information")
    table["log_odds"] = column("log_odds")
    for name in ("velocity_planet", "velocity_star"):
        table[name] = np.array(column(name)) * u.m / u.s
    for name in ("altitude", "moon_distance"):
        table[name] = np.array(column(name)) * u.deg
    table["moon_lit"] = column("moon_lit")
    table.meta["site"] = plan.site or "unknown"
    table.meta["summary"] = plan.sentence
    handle, temporary = tempfile.mkstemp(dir=path.parent, suffix=".ecsv")
    os.close(handle)
    try:
        table.write(temporary, format="ascii.ecsv", overwrite=True)
        Path(temporary).chmod(0o644)
        Path(temporary).replace(path)
    finally:
        Path(temporary).unlink(missing_ok=True)


def _date(julian_date: float) -> str:
    """Calendar date (UTC) of a Julian date."""
    moment = datetime.datetime(2000, 1, 1, 12) + datetime.timedelta(days=julian_date - 2451545.0)
    return moment.strftime("%Y-%m-%d")


def plan_as_dict(plan: NightPlan) -> dict[str, Any]:
    """The plan for JSON, units in the keys."""
    return {
        "nights": [
            {
                "rank": n.rank,
                "time_bjd_d": n.time,
                "date": _date(n.time),
                "information_nat": n.information,
                "log_odds_so_far": n.log_odds,
                "velocity_planet_m_s": n.velocity_planet,
                "velocity_star_m_s": n.velocity_star,
                "altitude_deg": n.altitude,
                "moon_distance_deg": n.moon_distance,
                "moon_lit": n.moon_lit,
            }
            for n in plan.nights
        ],
        "nights_needed": plan.nights_needed,
        "log_odds_threshold": plan.threshold,
        "hypotheses": [
            {"name": name, "weight": weight, "period_d": period}
            for name, weight, period in plan.hypotheses
        ],
        "extra_measurements": [
            {
                "name": e.name,
                "log_odds_per_night": e.log_odds,
                "worth_velocities": e.worth,
                "sentence": e.sentence,
            }
            for e in plan.extra
        ],
        "site": plan.site,
        "sentence": plan.sentence,
    }
