"""Comparison of object names."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.instrument.names import normal_name, same_name


@pytest.mark.parametrize(
    ("first", "second"),
    [
        ("HD 204827", "hd204827"),
        ("Cyg_OB2-12", "CYG OB2 12"),
        ("BD +59 389", "bd+59\t389"),
        ("BD \u221212 5133", "BD-12 5133"),
        (" \u00a0target ", "Target"),
    ],
)
def test_case_blanks_hyphens_and_underscores_are_ignored(first: str, second: str) -> None:
    assert same_name(first, second)


@pytest.mark.parametrize(("first", "second"), [("BD +25 727", "BD -25 727"), ("HD 1", "HD 11"), ("a.b", "ab")])
def test_other_differences_count(first: str, second: str) -> None:
    assert not same_name(first, second)


@settings(deadline=None, max_examples=100)
@given(st.text(alphabet=st.characters(max_codepoint=0x17F), max_size=20))
def test_the_normal_name_is_its_own_normal_name(name: str) -> None:
    assert normal_name(normal_name(name)) == normal_name(name)
    assert same_name(name, f" {name}_-")
