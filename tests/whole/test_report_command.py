"""``levelnet report`` from outside: the page, one-line complaints, and a real browser.

What is expected is the project's own contract, as in test_command_line.py.
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import levelnet
from levelnet.cli.main import main
from tests.browser import browser_path, running_browser
from tests.invented_history import history_with_field, invented_history
from tests.invented_weighing import invented_weighing
from tests.unit.test_report_page import record_of

NO_BROWSER = "no browser here: chromium is not on the path (apt-get install chromium)"
KINDS = ("field", "failed", "levels", "helium levels", "escape", "certificate", "budget", "sweep")
WIDTHS = (390, 1400)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in a folder that holds two results."""
    monkeypatch.chdir(tmp_path)
    levelnet.write(invented_history(), "run.h5")
    levelnet.write(invented_weighing(), "weights.h5")
    return tmp_path


def complaint(capsys: pytest.CaptureFixture[str]) -> str:
    """The one line that was said."""
    said = capsys.readouterr()
    assert said.out == "" and said.err.count("\n") == 1, said.err
    return said.err


def test_one_page_of_two_results(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["report", "run.h5", "weights.h5", "--output", "page.html", "--title", "Two <results>"]
    assert main([*words, "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    page = (folder / "page.html").read_text(encoding="utf-8")
    assert said["page"] == "page.html" and said["n_bytes"] == len(page.encode())
    assert [one["kind"] for one in said["results"]] == ["levelnet history", "levelnet weighing"]
    assert all(one["setup_digest"] in page for one in said["results"])
    assert "<h1>Two &lt;results&gt;</h1>" in page
    # No time and no place: neither this folder nor any other stands in the page.
    assert str(folder) not in page
    assert main(words) == 2
    assert "already exists" in complaint(capsys)
    assert main([*words, "--force"]) == 0
    assert (folder / "page.html").read_text(encoding="utf-8") == page
    assert "page.html: " in capsys.readouterr().out


def test_page_is_named_after_the_first_file(folder: Path) -> None:
    assert main(["report", "run.h5"]) == 0
    assert sorted(path.name for path in folder.iterdir()) == ["run.h5", "run.html", "weights.h5"]


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["absent.h5"], "absent.h5: cannot be read"),
        (["run.h5", "broken.h5"], "broken.h5: not an HDF5 file"),
        (["run.h5", "--output", "run.h5", "--force"], "is the file that is read"),
        (["run.h5", "--output", "nowhere/page.html"], "does not exist"),
    ],
)
def test_what_cannot_be_reported_is_one_line(
    folder: Path, capsys: pytest.CaptureFixture[str], words: list[str], said: str
) -> None:
    (folder / "broken.h5").write_text("no result")
    before = sorted(path.name for path in folder.iterdir())
    assert main(["report", *words]) == 2
    assert said in complaint(capsys)
    assert sorted(path.name for path in folder.iterdir()) == before


def test_full_disk_leaves_no_half_page(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def failing(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", failing)
    assert main(["report", "run.h5"]) == 1
    assert "No space left on device" in complaint(capsys)
    assert not list(folder.glob("*.html*")) and not list(folder.glob(".*"))


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """A page of everything, with all figures, and a page of one history."""
    place = tmp_path_factory.mktemp("pages")
    for kind in KINDS:
        levelnet.write(record_of(kind)[0], place / f"{kind}.h5")  # type: ignore[arg-type]
    files = [str(place / f"{kind}.h5") for kind in KINDS]
    made = [place / "all.html", place / "one.html"]
    assert main(["report", *files, "--output", str(made[0])]) == 0
    assert main(["report", files[0], "--output", str(made[1])]) == 0
    return made


@pytest.mark.skipif(browser_path() is None, reason=NO_BROWSER)
def test_a_real_browser_shows_the_page(pages: list[Path]) -> None:
    with running_browser() as browser:
        for page in pages:
            for width in WIDTHS:
                browser.open(page, width)
                # The page itself, and pictures that stand within it.
                asked = [one for one in browser.requests() if not one.startswith("data:")]
                assert asked == [page.as_uri()]
                assert browser.complaints() == []
                assert browser.evaluate("window.innerWidth") == width
                assert browser.evaluate("document.documentElement.scrollWidth") == width
                overflowing = browser.evaluate(
                    "[...document.querySelectorAll('body *')].filter(one =>"
                    " one.getBoundingClientRect().right > window.innerWidth + 1 &&"
                    " !one.closest('.scroll, pre, .skip')).map(one => one.outerHTML.slice(0, 80))"
                )
                assert overflowing == []
                figures = browser.evaluate("document.querySelectorAll('figure').length")
                drawn = browser.evaluate(
                    "[...document.querySelectorAll('figure svg')].filter(one =>"
                    " one.getBoundingClientRect().width > 200 &&"
                    " one.getBoundingClientRect().height > 100).length"
                )
                assert figures == drawn > 0
                images = [one for one in browser.accessibility_tree() if one[0] in {"image", "img"}]
                assert len(images) == figures
                assert all(name and len(said) > 40 for _, name, said in images)


@pytest.mark.skipif(browser_path() is None, reason=NO_BROWSER)
def test_letters_are_large_enough_on_a_phone(pages: list[Path]) -> None:
    with running_browser() as browser:
        browser.open(pages[1], 390)
        sizes = browser.evaluate(
            "[...document.querySelectorAll('p, li, td, th, dt, dd, figcaption, pre')].map(one =>"
            " parseFloat(getComputedStyle(one).fontSize))"
        )
        assert min(sizes) >= 13.0
        # Figures that are wider than the phone keep a scale at which 7 pt letters stay 7 px.
        scales = browser.evaluate(
            "[...document.querySelectorAll('figure svg')].map(one =>"
            " one.getBoundingClientRect().width / one.viewBox.baseVal.width)"
        )
        assert min(scales) >= 1.0


@pytest.mark.skipif(browser_path() is None, reason=NO_BROWSER)
def test_the_browser_sees_a_page_that_is_wrong(tmp_path: Path) -> None:
    # What the checks above would find: a request, an error, and something too wide.
    page = tmp_path / "wrong.html"
    page.write_text(
        "<!DOCTYPE html><html lang=en><title>wrong</title><body>"
        "<div style='width:2000px'>wide</div><img src='absent.png'>"
        "<script>throw new Error('wrong')</script>"
    )
    with running_browser() as browser:
        browser.open(page, 390)
        assert len(browser.requests()) == 2
        assert any("wrong" in one for one in browser.complaints())
        assert browser.evaluate("document.documentElement.scrollWidth") >= 2000


def test_history_with_a_field_has_its_spectrum(tmp_path: Path) -> None:
    levelnet.write(history_with_field(), tmp_path / "field.h5")
    target = tmp_path / "field.html"
    assert main(["report", str(tmp_path / "field.h5"), "--output", str(target)]) == 0
    assert "Spectrum of the radiation field" in target.read_text(encoding="utf-8")
