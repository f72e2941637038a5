"""The verdict as a file: the agreed keys, no NaN, the same bytes, and back."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from screener.core import InputFault, Orbit, Rotation, Screening
from screener.report.products import load_products, save_products
from screener.report.restore import load_verdict, verdict_from_dict
from screener.report.verdict_json import (
    plain,
    read_verdict,
    verdict_to_dict,
    verdict_to_json,
    write_verdict,
)
from tests.shared import needs_shared, shared
from tests.unit.report_sample import sample


def _compare(agreed, ours, path: str = "") -> None:
    """Every agreed key is there, in the same order, with a value of the same kind."""
    if isinstance(agreed, dict):
        assert isinstance(ours, dict), path
        order = [key for key in ours if key in agreed]
        assert order == list(agreed), path
        for key, value in agreed.items():
            _compare(value, ours[key], f"{path}.{key}")
    elif isinstance(agreed, list):
        assert isinstance(ours, list), path
        for item in ours if agreed else ():
            _compare(agreed[0], item, f"{path}[]")
    elif ours is not None:
        kind = (int, float) if isinstance(agreed, int | float) else type(agreed)
        assert isinstance(ours, kind), path


@needs_shared("contract.md")
def test_keys_are_those_agreed_upon():
    # the JSON block of the agreement about the outside face
    text = shared("contract.md").read_text(encoding="utf-8")
    block = re.search(r"```json\n(.*?)```", text, re.DOTALL)
    assert block is not None
    agreed = json.loads(block.group(1))
    agreed["signals"][0]["findings"][0].pop("outcome")
    _compare(agreed, json.loads(verdict_to_json(sample().verdict)))


def test_top_keys_in_order():
    keys = list(verdict_to_dict(sample().verdict))
    assert keys[:11] == [
        "schema", "star", "screener", "rules", "seed", "depth", "input", "rotation", "signals",
        "system", "cautions",
    ]  # fmt: skip


def test_nan_and_infinity_become_null():
    verdict = sample().verdict
    odd = replace(verdict, rotation=Rotation(float("nan"), float("inf")), baseline=np.float64(3.0))
    text = verdict_to_json(odd)
    content = json.loads(text, parse_constant=lambda name: pytest.fail(name))
    assert content["rotation"] == {"period_d": None, "period_err_d": None, "sources": []}
    assert content["input"]["baseline_d"] == 3.0
    assert content["system"]["unknown"] is None


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (1 / 3, 0.3333333333),
        (2457900.123456789, 2457900.12346),
        (1.23456789012e-17, 1.23456789e-17),
        (-0.0, 0.0),
        (np.float32(0.5), 0.5),
        (np.int64(3), 3),
        (np.bool_(True), True),
        (float("-inf"), None),
        ({1: (np.nan, "x")}, {"1": [None, "x"]}),
        (np.array([[1.0, np.nan]]), [[1.0, None]]),
        ("bad \udcff byte", "bad ? byte"),
    ],
)
def test_plain(value, expected):
    result = plain(value)
    assert result == expected
    assert type(result) is type(expected)


def test_same_verdict_same_bytes_whatever_the_last_digits(tmp_path: Path):
    verdict = sample().verdict
    first = verdict.signals[0]
    orbit = first.signal.orbit
    nudged = replace(orbit, period=orbit.period * (1 + 1e-13))
    moved = replace(orbit, period=orbit.period * (1 + 1e-7))
    texts = []
    for other in (orbit, nudged, moved):
        signal = replace(first, signal=replace(first.signal, orbit=other))
        path = tmp_path / "verdict.json"
        write_verdict(path, replace(verdict, signals=(signal, *verdict.signals[1:])))
        texts.append(path.read_bytes())
    assert texts[0] == texts[1]
    assert texts[0] != texts[2]


def test_nothing_but_the_file_is_left(tmp_path: Path):
    write_verdict(tmp_path / "new" / "verdict.json", sample().verdict)
    assert [p.name for p in (tmp_path / "new").iterdir()] == ["verdict.json"]


def test_failed_write_keeps_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    path = tmp_path / "verdict.json"
    write_verdict(path, sample().verdict)
    before = path.read_bytes()

    def fail(*_args):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", fail)
    with pytest.raises(OSError, match="No space"):
        write_verdict(path, replace(sample().verdict, seed=99))
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["verdict.json"]


def test_verdict_comes_back_whole():
    content = verdict_to_dict(sample().verdict)
    again = verdict_from_dict(content)
    assert verdict_to_dict(again) == content
    orbit = sample().verdict.signals[0].signal.orbit
    assert again.signals[0].signal.orbit.omega_peri == pytest.approx(orbit.omega_peri, rel=1e-9)
    assert again.models == sample().verdict.models
    assert again.notes.messages == sample().verdict.notes.messages
    assert again.star == sample().verdict.star


def test_reading_a_folder(tmp_path: Path):
    write_verdict(tmp_path / "verdict.json", sample().verdict)
    assert read_verdict(tmp_path) == verdict_to_dict(sample().verdict)
    assert load_verdict(tmp_path).seed == 7


def _without(key: str) -> str:
    content = verdict_to_dict(sample().verdict)
    del content[key]
    return json.dumps(content)


def _changed(**changes) -> str:
    return json.dumps(verdict_to_dict(sample().verdict) | changes)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "not JSON"),
        ('{"schema": 1,', "line 1, column"),
        ('{"schema": NaN}', "NaN"),
        ("[]", "no JSON object"),
        ("[" * 100000, "not JSON"),
        (_without("rotation"), "lacks the key rotation"),
        (_changed(schema=2), "schema 2"),
        (_changed(signals={}), "'signals' is not a list"),
        (_changed(signals=[{"id": "S1"}]), "signal 1 lacks period_d"),
        (_changed(signals=[7]), "signal 1 lacks id"),
    ],
)
def test_faulty_files_are_named(tmp_path: Path, text: str, says: str):
    path = tmp_path / "verdict.json"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputFault, match=re.escape(says)) as caught:
        read_verdict(path)
    assert caught.value.file == str(path)
    assert "screener candidate" in caught.value.cure


def test_absent_and_binary_files(tmp_path: Path):
    with pytest.raises(InputFault, match="no such file"):
        read_verdict(tmp_path / "nowhere")
    (tmp_path / "verdict.json").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputFault, match="not JSON that we write"):
        read_verdict(tmp_path)


@pytest.mark.parametrize(
    "change", [{"notes": {}}, {"depth": "bottomless"}, {"star_known": {"x": 1}}]
)
def test_verdict_of_a_wrong_kind_is_a_fault(tmp_path: Path, change: dict):
    path = tmp_path / "verdict.json"
    path.write_text(_changed(**change), encoding="utf-8")
    with pytest.raises(InputFault, match="a part missing"):
        load_verdict(path)


def _equal(one, other) -> None:
    if isinstance(one, np.ndarray):
        np.testing.assert_array_equal(one, other)
    elif hasattr(one, "__dataclass_fields__"):
        for name in one.__dataclass_fields__:
            _equal(getattr(one, name), getattr(other, name))
    elif isinstance(one, tuple):
        assert len(one) == len(other)
        for a, b in zip(one, other, strict=True):
            _equal(a, b)
    else:
        assert one == other


def test_products_come_back_the_same(tmp_path: Path):
    products = sample().products
    assert products is not None
    save_products(tmp_path / "products.npz", products)
    _equal(products, load_products(tmp_path / "products.npz"))
    assert [p.name for p in tmp_path.iterdir()] == ["products.npz"]


def test_faulty_products(tmp_path: Path):
    path = tmp_path / "products.npz"
    with pytest.raises(InputFault, match="no such file"):
        load_products(path)
    for content in (b"", b"PK\x03\x04 rubbish", b"\x80\x04pickle"):
        path.write_bytes(content)
        with pytest.raises(InputFault, match="not a file of curves"):
            load_products(path)
    np.savez(path, x=np.arange(3))
    with pytest.raises(InputFault, match="not a file of curves"):
        load_products(path)


def test_verdict_without_signals():
    empty = replace(sample().verdict, signals=(), known_planets=(), models=(), system={})
    content = json.loads(verdict_to_json(empty))
    assert content["signals"] == []
    assert verdict_from_dict(content).signals == ()


def test_orbit_with_nothing_known_survives():
    screening: Screening = sample()
    first = screening.verdict.signals[0]
    bare = replace(first, signal=replace(first.signal, orbit=Orbit(3.0, 1.0)))
    content = verdict_to_dict(replace(screening.verdict, signals=(bare,)))
    assert content["signals"][0]["period_err_d"] is None
    assert verdict_from_dict(content).signals[0].signal.orbit == Orbit(3.0, 1.0)
