"""The job file is checked to its last key before anything is read."""

from __future__ import annotations

from pathlib import Path

import pytest

from vop.errors import ConventionError, InputError
from vop.job import load_job


def _load(folder: Path, text: str):  # type: ignore[no-untyped-def]
    (folder / "JOB.toml").write_text(text)
    return load_job(folder / "JOB.toml")


def test_paths_are_relative_to_the_job_file(tmp_path: Path) -> None:
    job = _load(tmp_path, '[input]\npath = "export"\n[output]\nfolder = "out"\n')
    assert job.input_path == tmp_path / "export"
    assert job.folder == tmp_path / "out"
    assert job.average_mass_kg == pytest.approx(0.010)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[input\n", "not a TOML file"),
        ("[input]\n", r"\[input\] path is missing"),
        ('[inptu]\npath = "x"\n', "did you mean 'input'"),
        ('[input]\npath = "x"\nphaser = "peak"\n', "did you mean 'phasor'"),
        ("[input]\npath = 3\n", r"path should be a str, found 3"),
        ('[input]\npath = "x"\n[compress]\noverestimation = "5 %"\n', "overestimation should be a number"),
        ('[input]\npath = "x"\n[compress]\noverestimation = true\n', "overestimation should be a number"),
        ('[input]\npath = "x"\n[model]\naverage_mass_kg = -1\n', "average_mass_kg = -1"),
        ('[input]\npath = "x"\n[model]\naverage_mass_kg = nan\n', "average_mass_kg"),
        ('[input]\npath = "x"\n[export]\nformats = ["a", "a"]\n', "formats"),
        ('input = "x"\n', "should be a section"),
    ],
)
def test_what_is_wrong_is_named(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        _load(tmp_path, text)


def test_points_are_asked_for_with_a_mass_of_zero(tmp_path: Path) -> None:
    assert _load(tmp_path, '[input]\npath = "x"\n[model]\naverage_mass_kg = 0\n').average_mass_kg is None


def test_contradicting_directions_of_the_main_field_are_refused(tmp_path: Path) -> None:
    job = _load(tmp_path, '[input]\npath = "x"\n[domain]\nb0_direction = "+z"\n')
    assert job.settle_domain(3e8, "+z").b0_direction == "+z"
    with pytest.raises(InputError, match="b0_direction"):
        job.settle_domain(3e8, "-z")
    odd = _load(tmp_path, '[input]\npath = "x"\n[domain]\nb0_direction = "x"\n')
    with pytest.raises(ConventionError):
        odd.settle_domain(3e8, None)
