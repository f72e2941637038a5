"""Writing synthetic stars in the formats that the screener reads."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from screener.core import Array
from screener.synthetic.star import SyntheticStar

__all__ = ["write_star", "write_truth"]

_DIGITS = {"fwhm": 2, "bis": 2, "contrast": 5, "s_index": 5, "halpha": 6}


def write_star(folder: Path, star: SyntheticStar, stem: str | None = None) -> None:
    """Write ``<stem>.csv``, ``.toml`` and, where there is photometry, ``.phot.csv``."""
    folder.mkdir(parents=True, exist_ok=True)
    stem = star.name if stem is None else stem
    columns = [
        ("time", _fixed(star.campaign.time, 5)),
        ("rv", _fixed(star.rv, 3)),
        ("rv_err", _fixed(star.rv_err, 3)),
        ("instrument", [star.campaign.instruments[k].name for k in star.campaign.instrument]),
    ]
    for name, column in star.indicators.items():
        columns.append((name, _fixed(column.value, _DIGITS[name])))
        columns.append((f"{name}_err", _fixed(column.error, _DIGITS[name])))
    _write(folder / f"{stem}.csv", _table(columns))
    _write(folder / f"{stem}.toml", _toml(star.sidecar))
    if star.photometry is not None:
        time, flux, error = star.photometry
        rows = [
            ("time", _fixed(time, 5)),
            ("flux", _fixed(flux, 6)),
            ("flux_err", _fixed(error, 6)),
        ]
        _write(folder / f"{stem}.phot.csv", _table(rows))


def write_truth(path: Path, head: dict[str, Any], stars: list[dict[str, Any]]) -> None:
    """Write the truth of a set, one star a line."""
    path.parent.mkdir(parents=True, exist_ok=True)
    lines = [json.dumps(star, allow_nan=False) for star in stars]
    opening = json.dumps(head)[:-1]
    _write(path, opening + ', "stars": [\n' + ",\n".join(lines) + "\n]}\n")


def _fixed(values: Array, digits: int) -> list[str]:
    # adding zero turns -0.000 into 0.000
    return [f"{value:.{digits}f}" for value in np.round(values, digits) + 0.0]


def _table(columns: list[tuple[str, list[str]]]) -> str:
    head = ",".join(name for name, _ in columns)
    rows = [",".join(row) for row in zip(*(cells for _, cells in columns), strict=True)]
    return "\n".join([head, *rows]) + "\n"


def _toml(sections: dict[str, Any]) -> str:
    lines = []
    for section, entries in sections.items():
        lines.append(f"[{section}]")
        lines += [f"{key} = {json.dumps(value)}" for key, value in entries.items()]
    return "\n".join(lines) + "\n"


def _write(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8", newline="\n")
