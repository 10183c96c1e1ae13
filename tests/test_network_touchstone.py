"""Touchstone files: written by hand after the published format, and broken in every way."""

from __future__ import annotations

import shutil
import sys
from pathlib import Path

import numpy as np
import pytest
from conftest import write_channel_hdf5

from vop.errors import InputError, PluginError
from vop.network import read_touchstone

HEADER = "! an invented array\n# Hz S RI R 50\n"
TWO = HEADER + "297200000 0.11 0 0.21 0 0.12 0 0.22 0\n"


def _write(folder: Path, text: str, ports: int = 2) -> Path:
    path = folder / f"array.s{ports}p"
    path.write_text(text)
    return path


@pytest.fixture(autouse=True)
def _with_scikit_rf() -> None:
    pytest.importorskip("skrf")


def test_three_ports_are_written_row_by_row(tmp_path: Path) -> None:
    # Touchstone 1.1 (quoted from memory): for three ports and more one row of the matrix per line,
    # S11 S12 S13, so that columns are driven ports.
    text = HEADER + "297.2e6 0.11 0 0.12 0 0.13 0\n 0.21 0 0.22 0 0.23 0\n 0.31 0 0.32 0 0.33 0.5\n"
    found = read_touchstone(_write(tmp_path, text, 3), 297.2e6)
    wanted = [[0.11, 0.12, 0.13], [0.21, 0.22, 0.23], [0.31, 0.32, 0.33 + 0.5j]]
    np.testing.assert_allclose(found.matrix, wanted)
    assert (found.z0_ohm, found.frequency_hz, found.accuracy) == (50.0, 297.2e6, None)


def test_two_ports_are_written_column_by_column(tmp_path: Path) -> None:
    # The same standard's exception: S11 S21 S12 S22.
    found = read_touchstone(_write(tmp_path, TWO), 297.2e6, accuracy=0.01)
    np.testing.assert_allclose(found.matrix, [[0.11, 0.12], [0.21, 0.22]])
    assert found.accuracy == 0.01


@pytest.mark.parametrize(
    ("option", "numbers"),
    [("# MHz S MA R 75", "0.5 90"), ("# GHz S DB R 75", "-6.020599913 90"), ("# kHz S RI R 75", "0 0.5")],
)
def test_units_and_formats_of_numbers(tmp_path: Path, option: str, numbers: str) -> None:
    scale = {"kHz": 1e3, "MHz": 1e6, "GHz": 1e9}[option.split()[1]]
    found = read_touchstone(_write(tmp_path, f"{option}\n{297.2e6 / scale:.9g} {numbers}\n", 1), 297.2e6)
    np.testing.assert_allclose(found.matrix, [[0.5j]], atol=1e-9)
    assert found.z0_ohm == 75.0


def test_the_nearest_row_is_taken_and_a_far_one_refused(tmp_path: Path) -> None:
    rows = "".join(f"{f} {s} 0\n" for f, s in ((297.1e6, 0.1), (297.2e6, 0.2), (297.3e6, 0.3)))
    path = _write(tmp_path, HEADER + rows, 1)
    assert read_touchstone(path, 297.201e6).matrix[0, 0] == 0.2
    with pytest.raises(InputError, match=r"297\.3 MHz, the fields are at 298 MHz"):
        read_touchstone(path, 298e6)


@pytest.mark.parametrize(
    ("text", "ports", "why"),
    [
        (TWO, 3, "not readable"),
        (TWO[:-12], 2, "not readable"),
        (HEADER, 2, "not readable|no frequency"),
        ("", 2, "not readable"),
        (TWO.replace("0.21", "nan"), 2, "NaN"),
        (TWO.replace("0.21", "word"), 2, "not readable"),
        (TWO.replace("R 50", "R 0"), 2, "reference impedance"),
        (TWO.replace("R 50", "R -50"), 2, "reference impedance"),
        (TWO.replace("# Hz", "# GHz"), 2, "nearest frequency"),
        (TWO + TWO.splitlines()[-1] + "\n", 2, "two rows"),
        (TWO.replace("0.21", "2.1"), 2, "passive"),
        (TWO.replace("# Hz S RI R 50", "# Furlong S RI R 50"), 2, "not readable"),
        ("\x00\x01\x02 binary", 2, "not readable"),
    ],
)
def test_a_broken_file_is_one_line_that_names_it(tmp_path: Path, text: str, ports: int, why: str) -> None:
    path = _write(tmp_path, text, ports)
    with pytest.raises(InputError, match=why) as caught:
        read_touchstone(path, 297.2e6)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        read_touchstone(tmp_path / "none.s2p", 297.2e6)


def test_without_scikit_rf_the_error_says_how_to_get_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "skrf", None)
    with pytest.raises(PluginError, match=r"pip install 'vop\[network\]'"):
        read_touchstone(_write(tmp_path, TWO), 297.2e6)


def test_without_scikit_rf_an_export_still_opens_and_says_what_it_skipped(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from vop.plugins import open_fields

    folder = tmp_path / "export"
    write_channel_hdf5(folder, n_channels=2)
    shutil.copy(_write(tmp_path, TWO), folder)
    source = open_fields(folder)
    assert source.scattering is not None
    monkeypatch.setitem(sys.modules, "skrf", None)
    source = open_fields(folder)
    assert source.scattering is None
    assert any("array.s2p not read" in note for note in source.notes)
