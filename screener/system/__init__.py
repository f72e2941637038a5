"""A signal in its company: masses, stability, alternatives, nights to come, detection limits."""

from screener.system.company import stability_finding, stability_findings
from screener.system.describe import describe_system, references_used, target_velocities
from screener.system.plan_output import write_nights
from screener.system.schedule import NightPlan, rank_nights

__all__ = [
    "NightPlan",
    "describe_system",
    "rank_nights",
    "references_used",
    "stability_finding",
    "stability_findings",
    "target_velocities",
    "write_nights",
]
