"""What a VOTable states, checked before a library acts on it (VOTable 1.4).

Nothing outside the file is followed, and no count or size is believed.
"""

from __future__ import annotations

import re
from pathlib import Path
from xml.parsers import expat

from skytally.errors import InputError
from skytally.fits_layout import is_plausible_unit

__all__ = ["ELEMENT_LIMIT", "check_votable"]

ELEMENT_LIMIT = 20_000_000
ROW_LIMIT = 5_000_000
_ITEMS_LIMIT = 1_000_000
_TEXT_ENCODINGS = frozenset({"utf-8", "us-ascii", "ascii", "iso-8859-1", "latin-1"})


def check_votable(raw: bytes, file: str | Path, error: type[InputError]) -> None:
    """Walk the XML with a bare parser and refuse what points outside or states absurd sizes.

    Raises
    ------
    InputError
        Of the type ``error``.
    """
    walk = _Walk(file, error)
    parser = expat.ParserCreate()
    parser.XmlDeclHandler = walk.declaration
    parser.StartDoctypeDeclHandler = walk.doctype
    parser.EntityDeclHandler = walk.doctype
    parser.StartElementHandler = walk.start
    try:
        parser.Parse(raw, True)
    except expat.ExpatError as exc:
        raise error(
            f"the XML is not well formed ({exc})",
            file=file,
            row=exc.lineno,
            remedy="Fetch or write the file again.",
        ) from exc


class _Walk:
    def __init__(self, file: str | Path, error: type[InputError]) -> None:
        self._file = file
        self._error = error
        self._elements = 0

    def _refuse(
        self, what: str, remedy: str = "Save the table with its data inside, as TABLEDATA."
    ) -> InputError:
        return self._error(f"the VOTable {what}", file=self._file, remedy=remedy)

    def declaration(self, _version: str, encoding: str | None, _standalone: int) -> None:
        if encoding is not None and encoding.lower() not in _TEXT_ENCODINGS:
            raise self._refuse(f"is encoded as {encoding!r}, expected UTF-8")

    def doctype(self, *_: object) -> None:
        raise self._refuse("has a DOCTYPE, which may pull in other files or entities")

    def start(self, name: str, attributes: dict[str, str]) -> None:
        self._elements += 1
        if self._elements > ELEMENT_LIMIT:
            raise self._refuse(f"has more than {ELEMENT_LIMIT:,} elements", "Split it.")
        bare = name.rpartition(":")[2].upper()
        if bare == "STREAM":
            self._stream(attributes)
        elif bare == "TABLE":
            self._size("nrows", attributes.get("nrows", ""), ROW_LIMIT)
        elif bare in {"FIELD", "PARAM"}:
            self._size("arraysize", attributes.get("arraysize", ""), _ITEMS_LIMIT)
            unit = attributes.get("unit", "")
            if not is_plausible_unit(unit):
                raise self._refuse(f"states the unit {unit[:40]!r}", "Correct the unit.")

    def _stream(self, attributes: dict[str, str]) -> None:
        for key, value in attributes.items():
            key = key.rpartition(":")[2].lower()
            if key == "href":
                raise self._refuse(f"takes its data from {value[:80]!r}, another file or a URL")
            if key == "encoding" and value.lower() not in {"base64", "none", ""}:
                raise self._refuse(f"holds a stream encoded as {value[:40]!r}, expected base64")

    def _size(self, what: str, text: str, limit: int) -> None:
        product = 1
        for digits in re.findall(r"[0-9]+", text[:200]):
            product *= int(digits[:20])
        if product > limit:
            raise self._refuse(
                f"states {what} = {text[:40]!r}, more than {limit:,} in all",
                "Fetch or write the file again.",
            )
