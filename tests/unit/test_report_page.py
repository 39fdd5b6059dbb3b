"""The page of results: its structure, its escaping, its citations, and the same bytes each time.

The structure is that of HTML (WHATWG), parsed strictly by html5lib, and what WCAG 2.1 asks of
headings, names, tables and contrast.
"""

from __future__ import annotations

import dataclasses
import itertools
import re
import xml.etree.ElementTree as ET
from collections import Counter
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import html5lib
import numpy as np
import pytest

from levelnet.distilled.certificate import Certificate
from levelnet.distilled.history import history_from_table
from levelnet.errors import InputError, Outcome
from levelnet.history.setup import Setup
from levelnet.report.page.citing import bibtex
from levelnet.report.page.content import Origin, Table
from levelnet.report.page.page import html_page
from levelnet.report.page.works import Work, works_of
from levelnet.store.sweep_layout import sealed_content
from levelnet.store.write import content_of
from levelnet.studies.sweep_record import Sweep
from tests.helium_tables import helium_table
from tests.invented_escape import both, cheap_study
from tests.invented_history import history_with_field, invented_history
from tests.invented_weighing import band_targets, invented_budget, invented_weighing, with_helium
from tests.small_helium import helium_history
from tests.small_levels import small_helium_study, small_study
from tests.small_runs import small_setup
from tests.small_tables import small_table
from tests.unit.test_store_sweep import invented as invented_sweep

ROOT = Path(__file__).resolve().parents[2]
BAD = "<script>alert(1)</script> & \"'</title></style> ]]> \u03b1"
KINDS = (
    "history",
    "field",
    "failed",
    "no lines",
    "levels",
    "escape",
    "table",
    "certificate",
    "fast",
    "weighing",
    "budget",
    "sweep",
    "sweep apart",
    "helium",
    "helium escape",
    "helium levels",
    "helium table",
    "helium weighing",
)


def origin_of(record: object, setup: Setup) -> Origin:
    """What a file would say, where the record can be stored; else the least that a page needs."""
    if isinstance(record, Sweep):
        return Origin("result.h5", sealed_content(record).attributes)
    try:
        return Origin("result.h5", content_of(record).attributes)
    except InputError:
        return Origin("result.h5", {"setup": setup.to_toml(), "setup_digest": setup.digest})


def invented_certificate() -> Certificate:
    """Errors of a table; the last cosmology is not known."""
    redshift = np.linspace(1600.0, 20.0, 9)
    known = 1e-9 * np.sin(redshift)
    return Certificate(
        seed=1,
        n_points=8,
        rate_names=("recombination 2s", "recombination 2p", "exchange 2p-2s"),
        largest_error=np.array([3e-9, 2e-9, 1e-9]),
        rms_error=np.array([3e-10, 2e-10, 1e-10]),
        cosmologies=("setup", "far & <away>"),
        redshift=redshift,
        history_error=np.array([known, np.full(9, np.nan)]),
    )


@lru_cache(maxsize=len(KINDS))
def helium_record(kind: str) -> Any:
    """Results with levels of helium in them."""
    if kind == "helium escape":
        return both()
    if kind == "helium levels":
        return small_helium_study()
    if kind == "helium table":
        return helium_table()
    if kind == "helium weighing":
        return with_helium(invented_weighing())
    return helium_history(1e-4)


def record_of(kind: str) -> tuple[object, Setup]:
    """A result of each kind, and its setup; all are invented or small."""
    record: object
    if kind.startswith("sweep"):
        return invented_sweep(apart=kind == "sweep apart", reason=("", "", BAD)), small_setup(4)
    if kind.startswith("helium"):
        record = helium_record(kind)
        return record, record.setup
    if kind in {"levels", "escape"}:
        study = small_study() if kind == "levels" else cheap_study()
        return study, study.setup
    if kind in {"table", "certificate", "fast"}:
        table = small_table()
        if kind == "fast":
            return history_from_table(table, table.setup.cosmology), table.setup
        proof = invented_certificate() if kind == "certificate" else None
        return dataclasses.replace(table, certificate=proof), table.setup
    if kind in {"weighing", "budget"}:
        weighing = invented_weighing()
        if kind == "budget":
            targets = (*weighing.targets, *band_targets())
            weighing = dataclasses.replace(weighing, budget=invented_budget(targets))
        return weighing, weighing.setup
    if kind == "field":
        record = history_with_field()
    elif kind == "no lines":
        record = invented_history(lines=())
    else:
        outcome = Outcome.STEP_LIMIT if kind == "failed" else Outcome.CONVERGED
        record = dataclasses.replace(
            invented_history(notes=(BAD, f"warning: {BAD}")), outcome=outcome
        )
    return record, record.setup


@lru_cache(maxsize=32)
def page_of(*kinds: str, title: str = "") -> str:
    """The page of these results."""
    pairs = [record_of(kind) for kind in kinds]
    return html_page([(record, origin_of(record, setup)) for record, setup in pairs], title)


def tree_of(page: str) -> ET.Element:
    """Parse a page; any error of HTML that the parser knows is raised."""
    parser = html5lib.HTMLParser(
        html5lib.treebuilders.getTreeBuilder("etree"), strict=True, namespaceHTMLElements=False
    )
    tree: ET.Element = parser.parse(page)
    return tree


def local(element: ET.Element) -> str:
    """Name of an element without its namespace."""
    return str(element.tag).rpartition("}")[2]


@pytest.mark.parametrize("kind", KINDS)
def test_structure_is_sound(kind: str) -> None:
    page = page_of(kind)
    tree = tree_of(page)
    assert tree.attrib["lang"] == "en"
    assert (tree.findtext("head/title") or "").strip()
    assert tree.find("head/meta[@name='viewport']") is not None
    body = tree.find("body")
    assert body is not None
    for landmark in ("header", "nav", "main", "footer"):
        assert len(body.findall(landmark)) == 1, landmark
    levels = [int(local(one)[1]) for one in body.iter() if re.fullmatch(r"h\d", local(one))]
    assert levels[0] == 1 and levels.count(1) == 1
    # No level is skipped on the way down (WCAG 2.1, technique G141).
    assert all(after - before <= 1 for before, after in itertools.pairwise(levels))
    names = Counter(one.attrib["id"] for one in tree.iter() if "id" in one.attrib)
    assert [name for name, count in names.items() if count > 1] == []
    for one in tree.iter():
        for key in ("aria-labelledby", "aria-describedby"):
            if key in one.attrib:
                assert one.attrib[key] in names, one.attrib[key]
        if local(one) == "a":
            assert one.attrib["href"].removeprefix("#") in names


@pytest.mark.parametrize("kind", KINDS)
def test_tables_and_figures_are_named(kind: str) -> None:
    tree = tree_of(page_of(kind))
    tables = list(tree.iter("table"))
    assert tables
    for table in tables:
        assert (table.findtext("caption") or "").strip()
        assert all("scope" in cell.attrib for cell in table.iter("th"))
        assert all(one.find("th[@scope='row']") is not None for one in table.find("tbody") or ())
    figures = list(tree.iter("figure"))
    assert figures
    for figure in figures:
        drawings = [one for one in figure.iter() if local(one) == "svg"]
        # A wide one is there again with its panels stacked; a screen shows either of them.
        shown = [one.attrib["class"] for one in drawings]
        assert shown in (["narrow"], ["wide", "stacked"])
        for drawing in drawings:
            assert drawing.attrib["role"] == "img"
            parts = {local(one): (one.text or "").strip() for one in drawing}
            assert parts["title"] and len(parts["desc"]) > 40
            assert parts["title"] in " ".join((figure.find("figcaption") or figure).itertext())
            assert not re.search(r"\bnan\b|None|not reached", parts["desc"])


@pytest.mark.parametrize("kind", KINDS)
def test_nothing_is_fetched_or_run(kind: str) -> None:
    page = page_of(kind)
    tree = tree_of(page)
    tags = {local(one) for one in tree.iter()}
    assert tags.isdisjoint({"script", "iframe", "object", "embed", "base", "form", "foreignObject"})
    for one in tree.iter():
        for key, value in one.attrib.items():
            assert not key.lower().startswith("on"), key
            if str(key).rpartition("}")[2] in {"href", "src"}:
                assert value.startswith(("#", "data:")), value
    assert re.findall(r"@import|url\((?!#)", page) == []
    # Names of namespaces are no addresses; nothing fetches them.
    outside = set(re.findall(r"https?://[^\s\"'<>]+", page))
    assert outside <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}


def test_what_a_user_wrote_is_text() -> None:
    page = page_of("history", title=BAD)
    assert "<script" not in page
    tree = tree_of(page)
    assert BAD in (tree.findtext("body/header/h1") or "")
    assert BAD in (tree.findtext("head/title") or "")
    text = " ".join(tree.itertext())
    assert BAD in text and "far & <away>" in " ".join(tree_of(page_of("certificate")).itertext())


def test_warnings_come_first_and_say_so_in_words() -> None:
    tree = tree_of(page_of("failed"))
    notes = next(one for one in tree.iter("ul") if one.attrib.get("class") == "statements")
    assert [one.attrib.get("class") for one in notes][:1] == ["warning"]
    assert "".join(notes[0].itertext()).startswith("Warning:")
    said = ["".join(one.itertext()) for one in tree.iter("p")]
    assert f"Not converged: {Outcome.STEP_LIMIT.value}" in said


def test_failed_cases_of_a_sweep_are_warnings() -> None:
    text = " ".join(tree_of(page_of("sweep")).itertext())
    assert "1 of 3 cases may not be used as they stand" in text
    assert "Warning:" in text and BAD in text
    assert "3 values, 4 to 6" in text and "2 values, 0 to 0.1" in text  # one leaves its key out
    assert "file sha256:" in text  # no setup digest: a sweep has many setups


def test_numbers_are_those_of_the_result() -> None:
    history, setup = record_of("history")
    tree = tree_of(page_of("history"))
    cells = [one.text for one in tree.iter("td")]
    last = history.free_electron_fraction[-1]  # type: ignore[attr-defined]
    assert f"{last:.6e}" in cells
    values = [one.text for one in tree.iter("dd")]
    assert "1089.700" in values and "not reached" in values  # one milestone is NaN
    assert setup.digest in values


def test_same_results_give_the_same_bytes() -> None:
    assert page_of.__wrapped__("history") == page_of("history")


def test_several_results_stand_in_one_page() -> None:
    tree = tree_of(page_of("history", "table", "weighing"))
    assert len(list(tree.iter("article"))) == 3
    assert tree.findtext("body/header/h1") == "3 results"
    assert tree_of(page_of("history", "field")).findtext("body/header/h1") != "2 results"


def test_what_no_chapter_is_for_is_refused() -> None:
    with pytest.raises(InputError, match="one result at least"):
        html_page([])
    with pytest.raises(InputError, match=r"x\.h5: no report is made of a Setup"):
        setup = small_setup(4)
        html_page([(setup, Origin("x.h5", {"setup": setup.to_toml()}))])
    with pytest.raises(ValueError, match="2 cells a row"):
        Table("caption", ("a", "b"), (("1",),))


def luminance(colour: str) -> float:
    """Relative luminance of a colour (WCAG 2.1, definition of "relative luminance")."""
    parts = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255.0
    linear = np.where(parts <= 0.03928, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def test_contrast_is_enough_in_light_and_dark() -> None:
    css = files("levelnet.report.page").joinpath("page.css").read_text("utf-8")
    themes = re.findall(r":root \{(.*?)\}", css, re.DOTALL)[:2]
    assert len(themes) == 2
    for theme in themes:
        colours = dict(re.findall(r"--([a-z-]+): (#[0-9a-f]{6})", theme))
        grounds = ("page", "panel")
        pairs = [(text, ground) for text in ("text", "quiet", "link") for ground in grounds]
        pairs += [("good", "good-panel"), ("bad", "bad-panel"), ("text", "bad-panel")]
        for text, ground in pairs:
            light, dark = sorted((luminance(colours[text]), luminance(colours[ground])))[::-1]
            # WCAG 2.1, success criterion 1.4.3.
            assert (light + 0.05) / (dark + 0.05) >= 4.5, (text, ground)


def sources() -> str:
    """All that the project itself says about publications, in one spelling and one line."""
    paths = [one for one in (ROOT / "levelnet").rglob("*.py") if one.name != "works.py"]
    paths += [ROOT / "README.md", ROOT / "atomic_tables" / "sources.toml"]
    text = " ".join(path.read_text(encoding="utf-8") for path in paths)
    # Text in code goes on over quotes, comment signs and line ends.
    text = re.sub(r'"?\s*\n\s*#?\s*"?', " ", text)
    for short, whole in (
        ("ApJ", "Astrophys. J."),
        ("A&A", "Astron. Astrophys."),
        ("MNRAS", "Mon. Not. R. Astron. Soc."),
        ("PRL", "Phys. Rev. Lett."),
        ("Astrophys. J.S", "Astrophys. J. Suppl. Ser."),
    ):
        text = text.replace(short, whole)
    return re.sub(r"\s+", " ", text)


def all_works() -> set[Work]:
    """Every publication that some result rests on."""
    chosen = [
        small_setup(4),
        small_setup(4, lines={"hydrogen": "sobolev_feedback", "two_photon": "stimulated"}),
        small_setup(5, lines={"hydrogen": "transfer", "lyman_lines": 3}),
        small_setup(4, helium={"n_max": 4}, lines={"helium": "continuum"}),
        dataclasses.replace(
            small_setup(4, physics={"fine_structure_change": 1e-3}),
            cosmology={
                "hubble_km_s_mpc": 68.0,
                "baryon_density_h2": 0.0224,
                "matter_density_h2": 0.142,
                "dark_energy_w0": -0.9,
                "neutrino_masses_ev": [0.06],
            },
        ),
    ]
    records = [record_of(kind)[0] for kind in ("history", "levels", "escape", "budget", "table")]
    return {one for setup in chosen for record in records for one in works_of(record, setup)}


def test_every_citation_stands_in_the_project() -> None:
    text = sources()
    works = all_works()
    assert len(works) > 40
    for one in works:
        data = one.text.partition(", doi:")[0].startswith(("Kramida", "Drake;"))
        if data or one.doi:  # word by word from the catalogue of tables
            assert one.place in text and one.authors in text and one.doi in text
        else:
            name = f"{one.authors} {one.year}"
            places = [found.end() for found in re.finditer(re.escape(name), text)]
            assert any(one.place in text[at : at + 300] for at in places), one


def test_citations_follow_what_was_used() -> None:
    history = record_of("history")[0]

    def cited(setup: Setup, record: object = history) -> str:
        return " ".join(one.text for one in works_of(record, setup))

    plain = cited(small_setup(4))
    assert "Sobolev 1960" in plain and "97, 025002" in plain
    for absent in ("Hirata 2008", "Astron. Astrophys. 475, 109", "Switzer", "Kramida", "Cacuci"):
        assert absent not in plain
    field = cited(small_setup(5, lines={"hydrogen": "transfer", "lyman_lines": 3}))
    assert "Hirata 2008" in field and "Goeppert-Mayer 1931" in field
    less = cited(
        small_setup(
            5,
            lines={
                "hydrogen": "transfer",
                "lyman_lines": 3,
                "transfer": {"raman": False, "excited_two_photon": False, "scattering": False},
            },
        )
    )
    assert "Hirata 2008" not in less and "Hirata & Forbes" not in less
    assert "Astron. Astrophys. 475, 109" in less
    assert "Sobolev" not in cited(small_setup(4, lines={"hydrogen": "closed"}))
    helium = cited(small_setup(4, helium={"n_max": 4}))
    assert "doi:10.18434/T4W30F" in helium and "83006" not in helium
    assert "Cacuci" in cited(small_setup(4), record_of("weighing")[0])


def test_bibtex_entries_are_whole_and_named_apart() -> None:
    works = list(all_works())
    entries = bibtex(works)
    keys = [re.match(r"@(\w+)\{([A-Za-z]+(?:\d{4}|nd)[a-h]?),\n", one) for one in entries]
    assert all(keys) and len({one[2] for one in keys if one}) == len(works)
    for one in entries:
        assert one.count("{") == one.count("}")
        assert "author = {" in one and "year = {" in one and " & " not in one.replace(r"\&", "")
        assert "title" not in one or one.startswith("@book")
    made = dict(zip((one.text for one in works), entries, strict=True))
    assert made["Hirata 2008, Phys. Rev. D 78, 023001"].splitlines()[1:] == [
        "  author = {Hirata},",
        "  journal = {Phys. Rev. D},",
        "  volume = {78},",
        "  pages = {023001},",
        "  year = {2008},",
        "}",
    ]


def test_helium_has_its_tables_figures_and_answers() -> None:
    run = page_of("helium")
    assert "He II recombined through" in run
    assert "helium is half neutral" in run and "He II/He" in run
    assert "Validity figures of 2 1P-1 1S of He I" in run
    for title in ("Ionization of helium", "Departure coefficients of He I"):
        assert f">{title}<" in run
    # Sampled where helium recombines too.
    assert re.search(r'scope="row"[^>]*>2[0-9]{3}\.', run)
    weighed = page_of("helium weighing")
    assert "By rates of helium" in weighed and "escape of 2 1P-1 1S" in weighed
    assert "The largest of He I for z_*" in weighed
    studied = page_of("helium escape")
    assert "Lines of He I: What came out" in studied and "Lines of He I: Figures" in studied
    assert page_of("escape").count("<figure") < studied.count("<figure")
    assert "helium: lines to the ground state" in page_of("helium table")


def test_a_ladder_of_helium_names_its_atom() -> None:
    """A bare n_max is that of hydrogen, on the page as on the screen."""
    page = page_of("helium levels")
    assert "How many levels of helium matter" in page
    text = " ".join(" ".join(tree_of(page).itertext()).split())
    assert "helium n_max = 4 (truncation" in text and "rungs, helium n_max 4, 5, 6, 8" in text
    assert "at helium n_max = 8." in text and "hydrogen has n_max = 4 on every rung" in text
    assert "helium n_max" not in page_of("levels")
