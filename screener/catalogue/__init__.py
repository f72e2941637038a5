"""A whole catalogue overnight: many stars, on many processes or machines, resumable."""

from screener.catalogue.folder import DiskFull
from screener.catalogue.messages import Limits
from screener.catalogue.run import Options, Stopped, Summary, run_catalogue

__all__ = ["DiskFull", "Limits", "Options", "Stopped", "Summary", "run_catalogue"]
