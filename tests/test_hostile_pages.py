"""Whatever text a dataset or a candidate carries, the pages show it and never obey it."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from tests.hostile_datasets import everywhere_hostile
from tests.judge_cases import grid_columns, table
from tests.report_cases import Page
from tests.synthetic_run import write_synthetic_run
from tnquench.dataset.reader import Run, open_run
from tnquench.judge import page as judge_page
from tnquench.judge.judgement import judge
from tnquench.report import page as report_page

TAGS = frozenset(
    {
        "html",
        "head",
        "meta",
        "title",
        "style",
        "body",
        "main",
        "header",
        "section",
        "h1",
        "h2",
        "h3",
        "p",
        "dl",
    }
    | {
        "dt",
        "dd",
        "ul",
        "ol",
        "li",
        "div",
        "table",
        "thead",
        "tbody",
        "tr",
        "th",
        "td",
        "span",
        "figure",
        "img",
    }
    | {"figcaption", "pre", "br"}
)
ATTRIBUTES = frozenset(
    {"lang", "charset", "name", "content", "id", "class", "aria-label", "scope", "src", "alt"}
)

#: Pieces of text that mean something to a browser, a template, a formula or a terminal.
PIECES = (
    *(
        "<script>",
        "</script>",
        "<img src=x onerror=alert(1)>",
        "<b>",
        "</style>",
        "</pre>",
        "</title>",
        "<!--",
    ),
    *(
        "-->",
        "]]>",
        '"',
        "'",
        "' onload='x",
        "&",
        "&lt;",
        "&#60;",
        "{{ 7*7 }}",
        "{% raw %}",
        "$x_{$",
        "\\",
        "\x1b[31m",
    ),
    *(
        "\u202e",
        "\ufeff",
        "\u2028",
        "javascript:alert(1)",
        "url(http://x)",
        "<svg onload=x>",
        "<a href=//x>",
        "é",
        "a",
    ),
)
texts = st.lists(st.sampled_from(PIECES) | st.text(max_size=5), max_size=8).map("".join)

few = settings(
    deadline=None, derandomize=True, database=None, phases=[Phase.generate],
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)  # fmt: skip


def assert_harmless(markup: str) -> Page:
    """Only tags and attributes of our own; pictures inside the page; nothing is loaded and nothing runs."""
    page = Page(markup)
    for tag, attributes in page.tags:
        assert tag in TAGS, tag
        assert set(attributes) <= ATTRIBUTES, attributes
        assert tag != "img" or (attributes["src"] or "").startswith("data:image/svg+xml;base64,")
    (style,) = re.findall(r"<style>(.*?)</style>", markup, flags=re.DOTALL)
    assert not re.search(r"url\s*\(|@import|expression\s*\(", style)
    assert markup.count("<style>") == markup.count("<title>") == markup.count("<main>") == 1
    return page


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_synthetic_run(tmp_path_factory.mktemp("sound"), sites=12, times=5)


@pytest.fixture(scope="module")
def hostile(sound: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """A dataset in which every text is hostile."""
    path = tmp_path_factory.mktemp("hostile") / "run.h5"
    path.write_bytes(everywhere_hostile(sound.read_bytes()))
    return open_run(path)


@pytest.fixture
def undrawn(monkeypatch: pytest.MonkeyPatch) -> None:
    """Pages with empty pictures: the words around them are what is tested."""
    for module in (report_page, judge_page):
        monkeypatch.setattr(module, "render", lambda *_: b"<svg xmlns='http://www.w3.org/2000/svg'/>")


def with_texts(run: Run, data: st.DataObject) -> Run:
    """A dataset with another text at every place that takes one."""

    def text() -> str:
        return data.draw(texts)

    provenance = {name: text() for name in ("title", "machine", "created", "config_file")}
    config = "".join(letter for letter in text() if letter.isprintable())
    kinds = ("extra", "no_prediction", "refined", text())
    theory, budget = run.hydrodynamics["euler"].copy(), run.budget["energy_density"].copy()
    theory.attrs |= {"method": text(), "references": [text(), text()]}
    budget.attrs |= {"kind_truncation": text(), "kind_strings": text()}
    return replace(
        run,
        provenance=dict(run.provenance)
        | provenance
        | {
            "config_toml": f"# {config}\n{run.provenance['config_toml']}",
            "versions": {text(): text()},
            "preparation": {text(): [text(), {text(): 1.5}]},
            "events": [{"kind": kind, "time": 0.5, "detail": text()} for kind in kinds],
            "advice": {"sentences": [text()]},
        },
        hydrodynamics={"euler": theory},
        budget={**run.budget, "energy_density": budget},
    )


@settings(few, max_examples=8)
@given(st.data())
@pytest.mark.usefixtures("undrawn")
def test_any_text_of_a_dataset_is_harmless_in_the_report(
    hostile: Run, tmp_path: Path, data: st.DataObject
) -> None:
    run = with_texts(hostile, data)
    page = assert_harmless(report_page.render_page(run, tmp_path))
    title = " ".join(run.provenance["title"].split())
    assert title in " ".join(page.texts["question"].split())


@settings(few, max_examples=20)
@given(st.data())
@pytest.mark.usefixtures("undrawn")
def test_any_text_of_a_candidate_is_harmless_in_the_judgement(
    hostile: Run, tmp_path: Path, data: st.DataObject
) -> None:
    name = data.draw(texts).replace("/", "").replace("\0", "")[:50]
    column = "".join(letter for letter in data.draw(texts) if letter not in '",\r\n\0')
    fields = grid_columns(
        "energy_density",
        hostile.coordinates.time.values,
        hostile.coordinates.bond.values,
        hostile.quantum.energy_density.values,
    )
    _, header, *rows = table([fields]).splitlines()
    file = tmp_path / f"{name}.csv"
    file.write_text("\n".join([f"{header},q{column}", *(f"{row},1" for row in rows)]), encoding="utf-8")
    assert_harmless(judge_page.render_page(judge(file, hostile), tmp_path))


def test_a_dataset_hostile_everywhere_has_a_whole_report(hostile: Run) -> None:
    folder = hostile.path.parent
    page = assert_harmless(report_page.write_report(folder).read_text(encoding="utf-8"))
    assert len(page.pictures) > 10
    for section in ("question", "events", "settings", "references"):
        assert "<script>alert(" in page.texts[section], section
    for picture in (folder / "figures").glob("*.svg"):
        drawn = picture.read_text(encoding="utf-8")
        assert "<script" not in drawn
        assert "onerror" not in drawn
