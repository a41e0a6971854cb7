"""The config written out again: effective settings, notation, reference page."""

from __future__ import annotations

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.config_cases import good_configs, toml
from tnquench.config.document import effective_toml, settings_page
from tnquench.config.extras import KINDS
from tnquench.config.load import read_config
from tnquench.config.notation import quantity, shown, written
from tnquench.config.profile import SHAPES
from tnquench.config.schema import SECTIONS


@settings(max_examples=150, deadline=None, derandomize=True)
@given(good_configs())
def test_effective_toml_loads_back_to_an_equal_config(tables):
    config = read_config(toml(tables), subject="a.toml")
    text = effective_toml(config)
    assert read_config(text, subject="again") == config
    written_settings = tomllib.loads(text)
    for section in SECTIONS:
        settings_ = getattr(config, section).model_dump().items()
        unsaid = ("extra", "resources")
        kept = {key for key, value in settings_ if value is not None and not (key in unsaid and not value)}
        assert set(written_settings.get(section, {})) == kept, "every setting with a value is written"


@pytest.mark.parametrize(
    ("value", "text"), [(1e16, "1e16"), (1e-9, "1e-9"), (-0.05, "-0.05"), ("a\x7f\n", '"a\\u007f\\n"')]
)
def test_notation_is_short_and_loads_back(value, text):
    assert written(value) == text
    assert tomllib.loads(f"a = {text}")["a"] == value


@given(st.text(st.characters(exclude_categories=["Cs"])))
def test_any_text_survives_toml(text):
    assert tomllib.loads(f"a = {written(text)}")["a"] == text


def test_shown_values_stay_on_one_short_line():
    assert shown("x" * 500) == '"' + "x" * 59 + "..."
    assert shown("a\u2028b\u202ec") == '"a\\u2028b\\u202ec"'
    assert shown([1, [2], {"a": 1}]) == "[1, [...], [...]]"
    assert shown(list(range(9))) == "[0, 1, 2, 3, ...]"
    assert (quantity(1e6), quantity(0.3), quantity(12.0)) == ("1e6", "0.3", "12")


def test_settings_page_has_every_setting_with_its_meaning():
    page = settings_page()
    for schema in (*SECTIONS.values(), *SHAPES.values(), *KINDS.values()):
        for key, field in schema.model_fields.items():
            row = next(
                line
                for line in page.splitlines()
                if line.startswith(f"| `{key}` |") and str(field.description) in line
            )
            assert row.count("|") == 6, "five columns"
            assert field.description
    assert '| `cut` | "subspace", "svd" or "gram" | `"subspace"` |' in page
    assert "| `until` | a positive number, at most 1e6 | must be given | 1/J |" in page
    assert 'Not available in this version: "diffusive"' in page
    assert "| `in_start` | true or false | `true` |" in page


def test_examples_of_the_settings_page_make_a_config():
    blocks = [block.split("```")[0] for block in settings_page().split("```toml\n")[1:]]
    kinds = blocks[-len(KINDS) :]
    sections, shapes = blocks[: -5 - len(KINDS)], blocks[-5 - len(KINDS) : -len(KINDS)]
    for block in shapes[:-1]:
        read_config("".join(sections[:3]) + block + "".join(sections[3:]), subject="example")
    assert 'file = "profile.csv"' in shapes[-1]
    for kind, block in zip(KINDS, kinds, strict=True):
        chain = sections[1]
        if kind == "longitudinal_field":
            chain = chain.replace("xxz", "ising").replace("anisotropy", "transverse_field")
        later = [part for part in sections[3:] if "disorder" not in kind or "[stretch]" not in part]
        text = "".join([sections[0], chain, block, sections[2], shapes[0], *later])
        assert read_config(text, subject="example").chain.extra[0].kind == kind
