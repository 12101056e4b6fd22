"""What cannot be taken, for people: a line of a log, and another try once the site file is mended."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from companion.book.store import Book
from companion.intake.mapped import taken
from companion.intake.senml import WireError
from companion.intake.wire import Pack
from companion.settings.site import Site

LONGEST = 300  # letters of a line for people


@dataclass(frozen=True)
class Tried:
    """What became of payloads that were tried again: readings new in the book, payloads still refused."""

    readings: int
    refused: int


def retry(site: Site, book: Book, ids: Sequence[int] = ()) -> Tried:
    """Try payloads in quarantine again, all or those of some ids. What is good now is stored; one that is good as a whole is gone."""
    readings = refused = 0
    for entry in book.aside.entries(ids):
        with book.change():
            try:
                pack = taken(site, entry.topic, entry.payload, entry.arrived.timestamp())
            except WireError as error:
                book.aside.reason(entry.id, str(error))
                refused += 1
                continue
            new, clash = book.put_rows(pack.tank, pack.rows, not pack.relative)
            readings += new
            faults = pack.faults + ([conflict(pack, [pack.rows[place][7] for place in clash])] if clash else [])
            if faults:
                book.aside.reason(entry.id, told(faults))
                refused += 1
            else:
                book.aside.drop([entry.id])
    return Tried(readings, refused)


def conflict(pack: Pack, seqs: Sequence[int]) -> str:
    """Why readings of a pack are refused whose identities the book has with other content."""
    return f"another reading of life {pack.rows[0][6]}, seq {', '.join(map(str, seqs[:5]))} is in the book"


def told(faults: Sequence[str]) -> str:
    """The first of some faults, and how many more there are."""
    return faults[0] + (f" (and {len(faults) - 1} more)" if len(faults) > 1 else "")


def one_line(text: str) -> str:
    """Text from outside as one line of a log, with what could act on a terminal escaped.

    >>> print(one_line("north\\n\\x1b[2J"))
    north\\n\\x1b[2J
    """
    plain = "".join(letter if letter.isprintable() else letter.encode("unicode_escape").decode() for letter in text[:LONGEST])
    return plain if len(text) <= LONGEST else plain + " ..."
