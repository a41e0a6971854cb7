"""Whatever stands in a config, it loads or every line says plainly why not."""

from __future__ import annotations

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.config_cases import CONFIGS, good_configs, toml
from tnquench.config.extras import KINDS
from tnquench.config.load import read_config
from tnquench.config.profile import SHAPES
from tnquench.config.schema import SECTIONS, Config
from tnquench.errors import InputError

JARGON = ("pydantic", "Input should", "input_value", "Traceback", "type=", "validation error", "NoneType")

anything = st.recursive(
    st.one_of(
        st.integers(-(2**70), 2**70),
        st.floats(),
        st.booleans(),
        st.text(st.characters(exclude_categories=["Cs"]), max_size=8),
        st.dates(),
        st.sampled_from(["step", "table", "xxz", "ising", "euler", "svd", "separate", "full", "../b.csv"]),
        st.sampled_from(["hubbard", "potential", "box", "next_nearest", "uniform_field"]),
    ),
    lambda inner: (
        st.lists(inner, max_size=4) | st.dictionaries(st.text("abcdeLJ_.", max_size=6), inner, max_size=3)
    ),
    max_leaves=6,
)
known_keys = sorted(
    {
        *Config.model_fields,
        *(
            key
            for schema in (*SECTIONS.values(), *SHAPES.values(), *KINDS.values())
            for key in schema.model_fields
        ),
    }
)
keys = st.sampled_from(known_keys) | st.text("abcdehilnorstuxyz_", min_size=1, max_size=12)


@st.composite
def spoiled_configs(draw: st.DrawFn) -> str:
    """Good settings with a few of them replaced, renamed, added or removed at random places."""
    tables = draw(good_configs())
    for _ in range(draw(st.integers(1, 4))):
        table = tables
        while nested := [
            *(table[key] for key in table if isinstance(table[key], dict)),
            *(entry for value in table.values() if isinstance(value, list) for entry in value),
        ]:
            nested = [entry for entry in nested if isinstance(entry, dict)]
            if not nested or draw(st.booleans()):
                break
            table = draw(st.sampled_from(nested))
        action = draw(st.sampled_from(["replace", "add", "remove", "rename"]))
        if action == "add" or not table:
            table[draw(keys)] = draw(anything)
            continue
        key = draw(st.sampled_from(sorted(table)))
        old = table.pop(key)
        if action == "replace":
            table[key] = draw(anything)
        elif action == "rename":
            table[draw(keys)] = old
    return toml(tables)


@st.composite
def scratched_texts(draw: st.DrawFn) -> str:
    """The demo config with characters struck out, doubled or overwritten."""
    text = (CONFIGS / "demo.toml").read_text(encoding="utf-8")
    for _ in range(draw(st.integers(1, 6))):
        first = draw(st.integers(0, len(text) - 1))
        length = draw(st.integers(0, 12))
        scratch = draw(st.text("[]{}=\"'.#\n\\ 019eE-+naxé\0", max_size=4))
        text = text[:first] + scratch + text[first + length :]
    return text


def assert_loads_or_explains(text: str) -> None:
    lines: tuple[str, ...] = ("",)
    try:
        read_config(text, subject="a.toml")
    except InputError as error:
        lines = error.problems
    assert lines, "an error without an explanation"
    for line in lines:
        assert line.isprintable(), f"not one clean line: {line!r}"
        assert len(line) < 400, line
        assert not any(word in line for word in JARGON), line


@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(spoiled_configs())
def test_spoiled_configs_load_or_explain(text):
    assert_loads_or_explains(text)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(scratched_texts())
def test_scratched_texts_load_or_explain(text):
    assert_loads_or_explains(text)


@pytest.mark.parametrize(
    "text",
    [
        ".".join("a" * 3000) + " = 1",
        "a = 0x" + "f" * 20_000,
        "chain.sites = 0x" + "f" * 20_000,
        "start.beta.left = 0x" + "f" * 20_000 + "\nstart.beta.shape = 'step'",
        "a = " + "[" * 200 + "]" * 200,
        "start = []\nchain = [[]]\nevolution = 'x'",
        "'' = 1\n\"\\u202e\" = 2",
        "start.beta = []\nstart.beta_field = ''",
        "start.beta.shape = []\nstart.beta.file = 3",
        "start.beta.shape = 'table'\nstart.beta.file = 3",
        "chain.extra = 3\nchain.model = 'hubbard'",
        "chain.extra = [3, {}, {kind = 'potential'}, {kind = []}, {kind = 'potential', shape = 'box'}]",
        "chain.extra = [{kind = 'potential', shape = 'table', file = '../a'}, {kind = 'x', width = []}]",
        "chain = {sites = 4, anisotropy = 1, extra = [{kind = 'uniform_field', strength = 0x"
        + "f" * 2000
        + "}]}",
    ],
)
def test_odd_texts_are_explained(text):
    with pytest.raises(InputError):
        read_config(text, subject="a.toml")
    assert_loads_or_explains(text)
