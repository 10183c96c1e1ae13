"""Conventions are stated, never assumed; metadata survive their file form."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from vop.errors import ConventionError, InputError
from vop.metadata import Conventions, Domain, Metadata, Reference

_TEXT = st.text(st.characters(codec="utf-8"), max_size=20)


@given(name=st.lists(_TEXT, min_size=1, max_size=4), coil=_TEXT, warning=_TEXT, expiry=_TEXT)
def test_metadata_survive_their_json_form(name: list[str], coil: str, warning: str, expiry: str) -> None:
    meta = Metadata(
        reference=Reference("port current", "at the plug", 50.0, "terminated"),
        channel_names=tuple(name),
        domain=Domain(coil=coil, b0_direction="-z", bodies=("one",), expiry=expiry, frequency_hz=1.5e8),
        warnings=(warning,),
        details={"rule": "x", "counts": {"a": 3}},
    )
    assert Metadata.from_json(meta.to_json()) == meta


@pytest.mark.parametrize("text", ["", "{}", "[]", "null", '{"reference": 3}', '{"reference": {}}'])
def test_foreign_metadata_are_refused(text: str) -> None:
    with pytest.raises(InputError, match="metadata"):
        Metadata.from_json(text)


def test_silence_about_a_factor_of_two_is_refused() -> None:
    with pytest.raises(ConventionError, match=r"export: .*phasor \(peak \| rms\)"):
        Conventions.settle("export", {"time_sign": "+"}, {"reference": "forward power"})


@pytest.mark.parametrize("value", ["Peak", "amplitude", ""])
def test_an_unknown_convention_lists_the_known(value: str) -> None:
    with pytest.raises(ConventionError, match=r"'peak', 'rms'"):
        Conventions.settle("export", {"time_sign": "+", "reference": "forward power"}, {"phasor": value})


def test_what_is_not_stated_is_listed() -> None:
    assert "b0_direction" in Domain(coil="x").not_stated()
    assert "coil" not in Domain(coil="x").not_stated()


def test_direction_of_the_main_field_is_one_of_two() -> None:
    with pytest.raises(ConventionError, match=r"\+z"):
        Domain(b0_direction="up")
