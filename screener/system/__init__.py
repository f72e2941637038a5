"""A signal in its company: masses, stability, alternatives, nights to come, detection limits."""

from screener.system.describe import describe_system, target_velocities
from screener.system.schedule import NightPlan, rank_nights, write_nights
from screener.system.stability import stability_finding

__all__ = [
    "NightPlan",
    "describe_system",
    "rank_nights",
    "stability_finding",
    "target_velocities",
    "write_nights",
]
