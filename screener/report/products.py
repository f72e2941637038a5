"""The arrays behind the figures as a file, so that a dossier can be drawn again without a fit."""

from __future__ import annotations

import json
import zipfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from screener.core import (
    Array,
    Band,
    Fold,
    Indicator,
    InputFault,
    PeriodogramTrace,
    Photometry,
    Products,
    TimeSeries,
)
from screener.report.files import writing

__all__ = ["load_products", "save_products"]

_VERSION = 1
_CURVES = (
    "offsets",
    "jitter",
    "model_time",
    "activity_mean",
    "activity_sd",
    "orbits_mean",
    "activity_at_data",
)


def save_products(path: Path | str, products: Products) -> None:
    """Write the products as a compressed ``.npz``; it appears only once it is whole.

    Raises
    ------
    OSError
        If the file cannot be written.
    """
    arrays: dict[str, Any] = {name: getattr(products, name) for name in _CURVES}
    names = _pack_series(arrays, products.series)
    levels = []
    for index, trace in enumerate(products.periodograms):
        arrays[f"frequency_{index}"] = trace.frequency
        arrays[f"power_{index}"] = trace.power
        levels.append([trace.name, trace.level])
    for index, fold in enumerate(products.folds):
        for part in ("time", "rv", "rv_err", "instrument"):
            arrays[f"fold_{part}_{index}"] = getattr(fold, part)
    names |= {
        "version": _VERSION,
        "periodograms": levels,
        "folds": [fold.signal_id for fold in products.folds],
    }
    unique, where = _without_doubles(arrays)
    unique["names"] = np.array(json.dumps({**names, "arrays": where}))
    with writing(Path(path).with_suffix(".npz")) as temporary:
        np.savez_compressed(temporary, **unique)


def _pack_series(arrays: dict[str, Any], series: TimeSeries) -> dict[str, Any]:
    for part in ("time", "rv", "rv_err", "instrument"):
        arrays[f"series_{part}"] = getattr(series, part)
    for index, indicator in enumerate(series.indicators):
        arrays[f"indicator_{index}"] = indicator.value
        arrays[f"indicator_err_{index}"] = indicator.error
    for index, band in enumerate(series.bands):
        arrays[f"band_{index}"] = band.rv
        arrays[f"band_err_{index}"] = band.rv_err
    if series.photometry is not None:
        for part in ("time", "flux", "flux_err"):
            arrays[f"photometry_{part}"] = getattr(series.photometry, part)
    return {
        "instruments": list(series.instruments),
        "indicators": [[i.name, i.error_estimated] for i in series.indicators],
        "bands": [[b.name, b.wavelength] for b in series.bands],
        "photometry": series.photometry is not None,
    }


def _without_doubles(arrays: Mapping[str, Any]) -> tuple[dict[str, Any], dict[str, str]]:
    """Equal arrays once (all periodograms share a grid), and which name holds which."""
    seen: dict[bytes, str] = {}
    unique, where = {}, {}
    for name, array in arrays.items():
        array = np.asarray(array)
        key = str((array.dtype, array.shape)).encode() + array.tobytes()
        where[name] = seen.setdefault(key, name)
        if where[name] == name:
            unique[name] = array
    return unique, where


def load_products(path: Path | str) -> Products:
    """Read what ``save_products`` wrote.

    Raises
    ------
    InputFault
        If the file is absent, or not one of ours.
    """
    path = Path(path)
    cure = "Run 'screener candidate' on the star's table again to make a new one"
    try:
        with np.load(path, allow_pickle=False) as archive:
            names = json.loads(str(archive["names"]))
            if names["version"] != _VERSION:
                raise InputFault(
                    str(path), f"has version {names['version']!r}, not {_VERSION}", cure
                )
            held = {name: np.asarray(archive[name]) for name in archive.files if name != "names"}
        return _unpack(names, {name: held[kept] for name, kept in names["arrays"].items()})
    except FileNotFoundError:
        raise InputFault(str(path), "there is no such file", cure) from None
    except (OSError, ValueError, KeyError, TypeError, EOFError, zipfile.BadZipFile) as error:
        raise InputFault(str(path), f"is not a file of curves of ours ({error})", cure) from None


def _unpack(names: Mapping[str, Any], arrays: Mapping[str, Array]) -> Products:
    series = TimeSeries(
        time=arrays["series_time"],
        rv=arrays["series_rv"],
        rv_err=arrays["series_rv_err"],
        instrument=arrays["series_instrument"].astype(np.intp),
        instruments=tuple(names["instruments"]),
        indicators=tuple(
            Indicator(name, arrays[f"indicator_{k}"], arrays[f"indicator_err_{k}"], estimated)
            for k, (name, estimated) in enumerate(names["indicators"])
        ),
        bands=tuple(
            Band(name, arrays[f"band_{k}"], arrays[f"band_err_{k}"], wavelength)
            for k, (name, wavelength) in enumerate(names["bands"])
        ),
        photometry=Photometry(
            *(arrays[f"photometry_{part}"] for part in ("time", "flux", "flux_err"))
        )
        if names["photometry"]
        else None,
    )
    return Products(
        series=series,
        periodograms=tuple(
            PeriodogramTrace(name, arrays[f"frequency_{k}"], arrays[f"power_{k}"], level)
            for k, (name, level) in enumerate(names["periodograms"])
        ),
        folds=tuple(
            Fold(
                signal_id,
                arrays[f"fold_time_{k}"],
                arrays[f"fold_rv_{k}"],
                arrays[f"fold_rv_err_{k}"],
                arrays[f"fold_instrument_{k}"].astype(np.intp),
            )
            for k, signal_id in enumerate(names["folds"])
        ),
        **{name: arrays[name] for name in _CURVES},
    )
