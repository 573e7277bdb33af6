"""Products appear whole or not at all, and never replace anything unasked."""

import json
import os
from pathlib import Path

import pytest

from wakeledger.core.errors import DataError, ProductExistsError
from wakeledger.ledger.archive import open_archive
from wakeledger.ledger.tabular import ledger_csv, ledger_json
from wakeledger.present.products import OF_LEDGER

FILES = OF_LEDGER.files


def tree(folder):
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


@pytest.fixture
def quick(monkeypatch):
    """A report that costs nothing and a single figure, for the tests that are about files only."""
    import wakeledger.present.report as report
    from wakeledger.present.figures import gallery

    monkeypatch.setattr(gallery, "OF_LEDGER", {"budget": gallery.OF_LEDGER["budget"]})
    monkeypatch.setattr(gallery, "OF_PLANE", {})

    monkeypatch.setattr(report, "report_html", lambda ledger, figures: f"<p>{ledger.title}</p>")


def test_every_product_holds_the_ledger(ledger, tmp_path, monkeypatch):
    from wakeledger.present.figures import gallery

    monkeypatch.setattr(gallery, "OF_PLANE", {})
    out = tmp_path / "deep" / "er" / "out"
    names = OF_LEDGER.write(ledger, out, figures=("svg",))
    assert [str(name) for name in names[:4]] == list(FILES)
    assert len(names) == 6 and all((out / name).is_file() for name in names)
    assert json.loads((out / "ledger.json").read_text("utf-8")) == ledger_json(ledger)
    assert (out / "ledger.csv").read_text("utf-8") == ledger_csv(ledger)
    assert open_archive(out / "ledger.nc").title == ledger.title
    assert (out / "report.html").read_text("utf-8").startswith("<!DOCTYPE html>")
    assert [path.name for path in out.parent.iterdir()] == ["out"]


@pytest.mark.parametrize("name", FILES)
def test_any_existing_product_stops_it(ledger, tmp_path, quick, name):
    (tmp_path / name).write_text("old")
    with pytest.raises(ProductExistsError, match=f"{name} exist.*--overwrite"):
        OF_LEDGER.write(ledger, tmp_path)
    assert tree(tmp_path) == {name: b"old"}


def test_overwriting_replaces_products_and_keeps_the_rest(ledger, tmp_path, quick):
    (tmp_path / "notes.txt").write_text("mine")
    OF_LEDGER.write(ledger, tmp_path, figures=("png",))
    (tmp_path / "figures" / "mine.png").write_bytes(b"mine")
    assert len(OF_LEDGER.existing(tmp_path)) == 5
    OF_LEDGER.write(ledger, tmp_path, overwrite=True)
    assert set(tree(tmp_path)) == {*FILES, "notes.txt", "figures/mine.png"}
    (tmp_path / "figures" / "mine.png").unlink()
    OF_LEDGER.write(ledger, tmp_path, figures=("svg",), overwrite=True)
    OF_LEDGER.write(ledger, tmp_path, overwrite=True)
    assert not (tmp_path / "figures").exists()


@pytest.mark.parametrize("existing", [False, True])
def test_a_failure_while_building_leaves_nothing(ledger, tmp_path, monkeypatch, existing):
    out = tmp_path / "new" / "out"
    if existing:
        out.mkdir(parents=True)
        (out / "ledger.json").write_text("old")
    before = tree(tmp_path)

    def fail(_ledger, _figures):
        raise RuntimeError("the report failed")

    import wakeledger.present.report as report

    monkeypatch.setattr(report, "report_html", fail)
    with pytest.raises(RuntimeError, match="the report failed"):
        OF_LEDGER.write(ledger, out, overwrite=True)
    assert tree(tmp_path) == before
    assert out.exists() == existing
    assert out.parent.exists() == existing


def test_a_failure_while_moving_puts_everything_back(ledger, tmp_path, monkeypatch, quick):
    OF_LEDGER.write(ledger, tmp_path)
    before = tree(tmp_path)
    rename = Path.rename

    def fail(self, target):
        if self.name == "ledger.csv" and self.parent.name == "fresh":
            raise OSError(28, "No space left on device")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", fail)
    with pytest.raises(DataError, match="No space left on device"):
        OF_LEDGER.write(ledger, tmp_path, overwrite=True)
    assert tree(tmp_path) == before


def test_the_output_folder_is_a_file(ledger, tmp_path):
    (tmp_path / "out").write_text("x")
    with pytest.raises(DataError, match="is a file"):
        OF_LEDGER.write(ledger, tmp_path / "out")
    with pytest.raises(DataError, match="cannot be written"):
        OF_LEDGER.write(ledger, tmp_path / "out" / "below")
    assert tree(tmp_path) == {"out": b"x"}


@pytest.mark.skipif(os.geteuid() == 0, reason="the superuser may write anywhere")
def test_a_folder_without_permission(ledger, tmp_path):
    tmp_path.chmod(0o500)
    with pytest.raises(DataError, match="cannot be written"):
        OF_LEDGER.write(ledger, tmp_path / "out")
    tmp_path.chmod(0o700)


def test_the_names_are_the_documented_ones():
    assert FILES == ("ledger.nc", "ledger.json", "ledger.csv", "report.html")
