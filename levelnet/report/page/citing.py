"""How to cite: the program, and what the results on a page rest on, as text and as BibTeX."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterable, Sequence

from ...tables import TableSource
from .content import Block, Listing, Origin, Section, Statements, Table
from .works import Work

TITLE = "levelnet: level populations and the ionization history of cosmic hydrogen"
AUTHORS = "The levelnet developers"
_ARTICLE = re.compile(r"(?P<journal>[^;]*?) (?P<volume>[A-Z]?\d+), (?P<page>[A-Z]?\d+)")


def citing_section(
    origins: Sequence[Origin], works: Iterable[Work], tables: Iterable[TableSource]
) -> Section:
    """Everything to cite, each publication once.

    Parameters
    ----------
    origins : sequence of Origin
        Where the results come from.
    works : iterable of Work
        What all of them rest on.
    tables : iterable of TableSource
        The atomic tables that were read.
    """
    uses = _merged(works)
    program = program_text(origins)
    references = [program, *(one.text for one in uses)]
    blocks: list[Block] = [
        Statements(
            (
                "Name the version of levelnet and the digest of the setup: together they say what "
                "was computed.",
                "The publications below are those that these results rest on; each stands in the "
                "code that uses it. Titles and first names are not stated there, so they are in no "
                "entry: add them where a journal asks for them.",
                "Several are cited in the code from memory, and marked so there: look volume and "
                "page up before they go into print.",
            )
        ),
        Table(
            "What these results rest on",
            ("publication", "used for"),
            tuple((one.text, "; ".join(said)) for one, said in uses.items()),
            numeric=False,
        ),
    ]
    if rows := tuple(dict.fromkeys(_table_row(one) for one in tables)):
        head = ("atomic table", "source", "where in it, and how obtained")
        blocks.append(Table("Atomic tables that were read", head, rows, numeric=False))
    entries = [program_entry(origins), *bibtex(list(uses))]
    blocks += [
        Listing("References as text", "\n".join(references)),
        Listing("References as BibTeX", "\n\n".join(entries)),
    ]
    return Section("citing", "How to cite", tuple(blocks))


def _merged(works: Iterable[Work]) -> dict[Work, list[str]]:
    """Publications with all uses of each, in the order of their first use."""
    found: dict[tuple[str, int | None, str], tuple[Work, list[str]]] = {}
    for one in works:
        _, uses = found.setdefault((one.authors, one.year, one.place), (one, []))
        if one.use not in uses:
            uses.append(one.use)
    return dict(found.values())


def _versions(origins: Sequence[Origin]) -> str:
    return ", ".join(dict.fromkeys(one.text("levelnet_version") for one in origins))


def _digests(origins: Sequence[Origin]) -> str:
    """Digests of the setups; of a sweep, which has many, that of the file."""
    setups = [one.text("setup_digest") for one in origins if "setup_digest" in one.attributes]
    others = [one.text("digest") for one in origins if "setup_digest" not in one.attributes]
    named = [f"setup {', '.join(dict.fromkeys(setups))}"] if setups else []
    return "; ".join([*named, *(f"file {one}" for one in dict.fromkeys(others))])


def program_text(origins: Sequence[Origin]) -> str:
    """Cite the program with the versions and setup digests of the results, in one line."""
    return f"{AUTHORS}, {TITLE}, version {_versions(origins)}; {_digests(origins)}"


def program_entry(origins: Sequence[Origin]) -> str:
    """Make the same an entry of BibTeX."""
    fields = {
        "author": f"{{{AUTHORS}}}",
        "title": f"{{{TITLE}}}",
        "version": _versions(origins),
        "note": _digests(origins),
    }
    return _entry("misc", "levelnet", fields)


def bibtex(works: Sequence[Work]) -> list[str]:
    """One entry each; keys are surname and year, with a letter where two would be the same."""
    plain = [_key(one) for one in works]
    entries = []
    for count, one in enumerate(works):
        taken = plain[:count].count(plain[count])
        key = plain[count] + ("" if not taken else "abcdefgh"[taken])
        entries.append(_entry(*_kind(one, key)))
    return entries


def _kind(work: Work, key: str) -> tuple[str, str, dict[str, str]]:
    """Kind of entry, key and fields of a publication."""
    fields = {"author": _authors(work.authors)}
    if found := _ARTICLE.fullmatch(work.place):
        kind = "article"
        fields |= {name: found[name] for name in ("journal", "volume")}
        fields["pages"] = found["page"]
    elif re.search(r"\d|;", work.place) or "Database" in work.place:
        kind = "misc"
        fields["howpublished"] = work.place
    else:
        kind = "book"
        title, _, publisher = work.place.partition(", ")
        fields["title"] = f"{{{title}}}"
        if publisher:
            fields["publisher"] = publisher
    fields["year"] = "n.d." if work.year is None else str(work.year)  # no date
    if work.doi:
        fields["doi"] = work.doi
    return kind, key, fields


def _authors(text: str) -> str:
    """Surnames as BibTeX joins them; a group of people is one name."""
    names = re.split(r", | & |; ", text.removesuffix(" et al."))
    names = [f"{{{one}}}" if " " in one else one for one in dict.fromkeys(names)]
    return " and ".join([*names, "others"] if text.endswith(" et al.") else names)


def _key(work: Work) -> str:
    first = re.split(r"[,;& ]", work.authors)[0]
    plain = unicodedata.normalize("NFKD", first).encode("ascii", "ignore").decode()
    return re.sub(r"[^A-Za-z]", "", plain) + str(work.year or "nd")


def _entry(kind: str, key: str, fields: dict[str, str]) -> str:
    lines = [f"  {name} = {{{_escaped(value)}}}," for name, value in fields.items()]
    return "\n".join([f"@{kind}{{{key},", *lines, "}"])


def _escaped(text: str) -> str:
    return re.sub(r"([&%#_])", r"\\\1", text)


def _table_row(one: TableSource) -> tuple[str, str, str]:
    doi = f", doi:{one.doi}" if one.doi else ""
    source = f"{one.authors_and_year}, {one.journal}{doi}"
    return f"{one.name}: {one.quantity}", source, f"{one.place}; {one.obtained}"
