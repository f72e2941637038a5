"""The ranked table for other programs: ECSV, CSV, FITS and VOTable."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from screener.core import InputFault
from screener.core.described_table import Columns, described_table, harmless
from screener.store.database import Store
from screener.store.reading import current_run, ranked

__all__ = ["COLUMNS", "FORMATS", "export_ranked", "ranked_table"]

# ending -> astropy's name of the format
FORMATS = {
    ".ecsv": "ascii.ecsv",
    ".csv": "ascii.csv",
    ".fits": "fits",
    ".fit": "fits",
    ".vot": "votable",
    ".xml": "votable",
}

COLUMNS: Columns = {
    "rank": ("int", None, "1 for the most planet-like signal"),
    "star": ("str", None, "the table's file name without its ending"),
    "star_name": ("str", None, "name of the star"),
    "signal": ("str", None, "S1, S2, ... within the star; empty where there is no signal"),
    "grade": ("str", None, "planetary, ambiguous, likely stellar or no signal"),
    "score": ("float", None, "natural log-odds of planet against star"),
    "period_d": ("float", "d", "period"),
    "period_err_d": ("float", "d", "1-sigma error of the period"),
    "k_m_s": ("float", "m / s", "semi-amplitude"),
    "k_err_m_s": ("float", "m / s", "1-sigma error of the semi-amplitude"),
    "eccentricity": ("float", None, "eccentricity"),
    "false_alarm_probability": ("float", None, "chance of such a period in noise"),
    "rotation_period_d": ("float", "d", "rotation period of the star"),
    "rotation_period_err_d": ("float", "d", "1-sigma error of the rotation period"),
    "deciding_rules": ("str", None, "rules that decided the grade"),
    "next_step": ("str", None, "what to do next"),
    "n_obs": ("int", None, "velocities used"),
    "n_nights": ("int", None, "nights with a velocity"),
    "baseline_d": ("float", "d", "first to last velocity"),
    "seconds": ("float", "s", "time taken by the star"),
}


def ranked_table(store: Store, *, plain_text: bool = False, ascii_only: bool = False) -> Any:
    """The ranked table as a masked astropy table with units and descriptions.

    Parameters
    ----------
    store : Store
    plain_text : bool
        Make text harmless for spreadsheets: what would start a formula gets an apostrophe.
    ascii_only : bool
        Write other characters as escapes, for formats that know ASCII only.

    Returns
    -------
    astropy.table.Table
    """

    def text(value: str) -> str:
        return _text(value, plain_text, ascii_only)

    table = described_table(COLUMNS, ranked(store), text)
    run = current_run(store)
    for key in ("version", "rules", "seed", "depth"):
        if key in run:
            table.meta[key] = _text(str(run[key]), False, ascii_only)
    return table


def _text(text: str, plain: bool, ascii_only: bool) -> str:
    text = "".join(c if c.isprintable() else " " for c in text)
    if ascii_only:
        text = text.encode("ascii", "backslashreplace").decode("ascii")
    return harmless(text) if plain else text


def export_ranked(store: Store, path: Path) -> None:
    """Write the ranked table; the format follows the ending. The file appears whole or not at all.

    Raises
    ------
    InputFault
        If the ending is none of ``FORMATS``.
    OSError
        If the file cannot be written.
    """
    import os
    import warnings

    ending = path.suffix.lower()
    if ending not in FORMATS:
        raise InputFault(
            str(path), f"the ending '{path.suffix}' is unknown", f"Use one of {', '.join(FORMATS)}"
        )
    kind = FORMATS[ending]
    table = ranked_table(store, plain_text=kind == "ascii.csv", ascii_only=kind == "fits")
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.parent / f".{path.stem[:80]}.{os.getpid()}{ending}"
    options: dict[str, Any] = {"overwrite": True}
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # unit spellings that FITS and VOTable change
            if kind == "ascii.csv":
                table.meta.clear()
                _write_csv(table, temporary)
            else:
                table.write(str(temporary), format=kind, **options)
        with temporary.open("rb") as handle:
            os.fsync(handle.fileno())
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def _write_csv(table: Any, path: Path) -> None:
    import csv

    import numpy as np

    with path.open("w", encoding="utf-8", newline="") as handle:
        writer = csv.writer(handle)
        writer.writerow(table.colnames)
        for row in table:
            values = (row[name] for name in table.colnames)
            writer.writerow(["" if v is np.ma.masked else v for v in values])
