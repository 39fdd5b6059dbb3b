"""What a page is made of, as plain records; how it looks is the business of the template."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import ClassVar

_WARNING = "warning: "
# Letters of 0.9 rem that a line of a phone holds, what a column has beside its own, and the least
# that page.css gives to the names of rows of numbers.
_PHONE, _BESIDE, _NAME = 39, 2, 11
UNKNOWN = "unknown"
"""What a file that does not state something is taken to say."""


@dataclass(frozen=True, slots=True)
class Origin:
    """Where a result comes from.

    Attributes
    ----------
    name : str
        Name of its file, without the folder.
    attributes : mapping of str to str or int
        What the file says of itself: versions, constants, checksums, setup and digests.
    """

    name: str
    attributes: Mapping[str, str | int]

    def text(self, key: str) -> str:
        """One attribute as text; "unknown" where the file does not state it."""
        return str(self.attributes.get(key, UNKNOWN))


@dataclass(frozen=True, slots=True)
class Table:
    """A table of text; the first cell of each row names the row.

    Attributes
    ----------
    caption : str
        What it shows; read out before the cells.
    head : tuple of str
        Names of the columns.
    rows : tuple of tuple of str
        As many cells each as there are columns.
    numeric : bool
        Whether the cells after the first are numbers, to stand right-aligned.
    """

    caption: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: bool = True
    kind: ClassVar[str] = "table"

    def __post_init__(self) -> None:
        """Refuse rows that are longer or shorter than the head."""
        if any(len(row) != len(self.head) for row in self.rows):
            raise ValueError(f"table {self.caption!r}: {len(self.head)} cells a row are needed")

    @property
    def broad(self) -> bool:
        """Whether it is broader than a phone, by the letters of its columns."""
        letters = 0
        for k, column in enumerate(zip(self.head, *self.rows, strict=True)):
            # Names and texts wrap at blanks, numbers do not.
            whole = self.numeric and k > 0
            cells = column[1:] if whole else " ".join(column[1:]).split()
            least = _NAME if self.numeric and k == 0 else 0
            widest = max(map(len, [*column[0].split(), *cells]), default=0)
            letters += max(widest, least) + _BESIDE
        return letters > _PHONE


@dataclass(frozen=True, slots=True)
class Facts:
    """Names with what belongs to each, in the order of reading."""

    rows: tuple[tuple[str, str], ...]
    kind: ClassVar[str] = "facts"


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure.

    Attributes
    ----------
    name : str
        Unique on the page; letters, digits and hyphens.
    title : str
        What it shows, in a few words.
    alternative : str
        What somebody learns from it who does not see it.
    svg : str
        The drawing, from :func:`levelnet.report.page.drawing.inline_svg`; after a wide one the same
        with its panels under one another, of which a page shows either.
    """

    name: str
    title: str
    alternative: str
    svg: str
    kind: ClassVar[str] = "picture"


@dataclass(frozen=True, slots=True)
class Statements:
    """Sentences as a list; those that begin with "warning: " are marked and come first."""

    texts: tuple[str, ...]
    kind: ClassVar[str] = "statements"

    @property
    def warnings(self) -> tuple[str, ...]:
        """What is a warning, without the word."""
        return tuple(one.removeprefix(_WARNING) for one in self.texts if one.startswith(_WARNING))

    @property
    def plain(self) -> tuple[str, ...]:
        """The rest."""
        return tuple(one for one in self.texts if one and not one.startswith(_WARNING))


@dataclass(frozen=True, slots=True)
class Listing:
    """Text that is to be copied as it stands, with a label."""

    label: str
    text: str
    kind: ClassVar[str] = "listing"


Block = Table | Facts | Picture | Statements | Listing


@dataclass(frozen=True, slots=True)
class Section:
    """Blocks under a heading; `name` is unique on the page."""

    name: str
    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True)
class Chapter:
    """One result.

    Attributes
    ----------
    name : str
        Unique on the page.
    title : str
        What the user called it; may be empty.
    what : str
        What kind of result it is.
    file : str
        Name of its file.
    ok : bool or None
        Whether it may be used as it stands; None where nothing was integrated.
    outcome : str
        How it ended, in a sentence.
    answers : tuple of str
        The short answer, before everything else.
    sections : tuple of Section
        All else.
    word : str
        What stands in bold before `outcome`; empty for the usual where `ok` is what it is.
    """

    name: str
    title: str
    what: str
    file: str
    ok: bool | None
    outcome: str
    answers: tuple[str, ...]
    sections: tuple[Section, ...] = field(default=())
    word: str = ""
