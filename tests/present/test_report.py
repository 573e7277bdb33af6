"""The report is one self-contained file that says everything the ledger holds."""

import dataclasses
import re
from html.parser import HTMLParser

import pytest

from wakeledger.present.report import report_html
from wakeledger.present.wording import STATEMENT, words

VOID = {"meta", "img", "br", "hr", "link", "input"}


class Outline(HTMLParser):
    """Checks that every element is closed in its order; gathers addresses and text."""

    def __init__(self):
        super().__init__()
        self.open, self.addresses, self.text, self.headings, self.alts = [], [], [], [], []

    def handle_starttag(self, tag, attributes):
        values = dict(attributes)
        self.addresses += [values[name] for name in ("src", "href", "xlink:href", "action") if name in values]
        if tag == "img":
            self.alts.append(values.get("alt"))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text.append(data)
        if self.open and self.open[-1] == "h2":
            self.headings.append(data)


def outline(document):
    parsed = Outline()
    parsed.feed(document)
    parsed.close()
    assert not parsed.open
    return parsed


@pytest.fixture(scope="module")
def document(ledger):
    return report_html(ledger)


@pytest.fixture(scope="module")
def parsed(document):
    return outline(document)


def test_it_needs_nothing_from_outside(document, parsed):
    assert parsed.addresses
    assert all(address.startswith("data:image/svg+xml;base64,") for address in parsed.addresses)
    style = re.search(r"<style>(.*?)</style>", document, re.DOTALL).group(1)
    assert "url(" not in style and "@import" not in style
    assert "<script" not in document


def test_it_says_everything(ledger, parsed):
    text = " ".join(" ".join(parsed.text).split())
    assert STATEMENT in text
    assert ledger.title in text
    for check in ledger.checks:
        assert words(check.name) in text and check.message in text
    for line in ledger.estimates:
        assert words(line.method) in text
    for part in (
        *ledger.notes, "2.788", "0.041", "148.2", "counts", "balance", "configuration", "SHA-256 " + "a1" * 32,
        "wakeledger reduce survey.toml", "numpy 2.0.0", "crossflow noise", "0.020694"[:5], "Flügel",
        "the wake is cut at the window's lower edge",
    ):  # fmt: skip
        assert part in text, part
    assert parsed.headings == [
        "The ledger", "Test, stream and model", "Other methods against the primary one", "Comparison with other values",
        "Checks of the survey", "The plane", "Vortices", "Along the span", "Uncertainty budget", "Notes",
        "Where it comes from",
    ]  # fmt: skip
    assert len(parsed.alts) == 6 and all(parsed.alts)


def test_what_needs_attention_stands_first(document):
    first = document.index("Before these figures are used")
    assert first < document.index("The ledger</h2>")
    block = document[first : document.index("</div>", first)]
    assert "core resolution failed" in block
    assert "edge vorticity warns" in block
    assert "Vortex sum disagrees with the primary induced drag (E_n = 1.80)" in block


@pytest.fixture
def no_figures(monkeypatch):
    import wakeledger.present.figures as figures

    monkeypatch.setattr(figures, "draw", lambda ledger: {})


def test_texts_of_the_user_are_escaped(ledger, document, no_figures):
    assert "α = 6° &lt;3" in document
    script = "<script>alert(1)</script>"
    nasty = dataclasses.replace(ledger, title=script, notes=(script,), test={script: script}, survey_text=script)
    assert "<script" not in report_html(nasty)


def test_the_same_ledger_gives_the_same_bytes(ledger, document):
    assert report_html(ledger) == document


def test_a_ledger_without_the_optional_parts(ledger):
    bare = dataclasses.replace(
        ledger, estimates=(), comparisons=(), budget=(), checks=(), notes=(), test={}, reference={}, model={},
        vortices=None, wake_line=None, span=None, inputs={}, provenance={},
    )  # fmt: skip
    parsed = outline(report_html(bare))
    assert parsed.headings == ["The ledger", "The plane", "Where it comes from"]


def test_the_corrected_coefficient_has_its_column_between_walls(ledger, document, no_figures):
    assert "corrected for blockage" not in document
    rows = (dataclasses.replace(ledger.rows[0], coefficient_corrected=0.01413), *ledger.rows[1:])
    walled = report_html(dataclasses.replace(ledger, rows=rows))
    assert "corrected for blockage" in walled
    assert '<td class="n">141.3</td>' in walled
