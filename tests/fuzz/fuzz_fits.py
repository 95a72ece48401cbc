"""FITS files made from nothing: tables and images whose headers may lie."""

from __future__ import annotations

import gzip
from collections.abc import Callable
from random import Random

__all__ = ["NUMBERS", "healpix_file", "image_file", "table_file"]

CARD, BLOCK = 80, 2880
NUMBERS = (
    *("0", "1", "-1", "12", "29", "30", "48", "64", "999", "1000000", "2147483647", "-2147483648"),
    *("4294967296", "9223372036854775807", "-9223372036854775808", "99999999999999999999", "1e300"),
    *("nan", "inf", "-inf", "1e999", "0.5", "-0.0", "T", "''", "'x'", "(1,2)", "1E-320", "0x10"),
)
UNITS = (
    *("deg", "s", "sr-1", "pix-1", "1 / sr", "Mpc", "Mpc-2", "mag", "hourangle", "", "furlong"),
    *(
        "10**99999999 sr-1",
        "sr**-1e99",
        "m**(1/0)",
        "(((((((((((((",
        "sr-1.sr-1.sr-1",
        "deg-2 /",
        "e10e10",
    ),
)


def _card(key: str, value: str) -> bytes:
    return f"{key:8}= {value:>20}".encode("latin-1", "replace")[:CARD].ljust(CARD)


def _header(cards: list[bytes]) -> bytes:
    text = b"".join(cards) + b"END".ljust(CARD)
    return text + b" " * (-len(text) % BLOCK)


_PRIMARY = _header([_card("SIMPLE", "T"), _card("BITPIX", "8"), _card("NAXIS", "0")])


def table_file(
    rng: Random, columns: list[tuple[str, str, str]], rows: int, keys: dict[str, str]
) -> bytes:
    """Return a FITS table of random bytes; now and then one number of its header lies."""
    width = sum(_width(form) for _, form, _ in columns)
    stated = {
        "XTENSION": "'BINTABLE'",
        "BITPIX": "8",
        "NAXIS": "2",
        "NAXIS1": str(width),
        "NAXIS2": str(rows),
        "PCOUNT": "0",
        "GCOUNT": "1",
        "TFIELDS": str(len(columns)),
    }
    for number, (name, form, unit) in enumerate(columns, start=1):
        stated |= {f"TTYPE{number}": f"'{name}'", f"TFORM{number}": f"'{form}'"}
        if unit:
            stated[f"TUNIT{number}"] = f"'{unit}'"
    stated |= keys
    for _ in range(rng.choice((0, 0, 1, 1, 2))):
        stated[rng.choice(list(stated))] = rng.choice(NUMBERS)
    if rng.random() < 0.2:
        key = rng.choice(
            ("TSCAL1", "TZERO1", "TNULL1", "TDIM1", "TDISP1", "THEAP", "EXTNAME", "ZIMAGE")
        )
        stated[key] = rng.choice((*NUMBERS, "'(3,4)'", "'(99999999,99999999)'", "'F10.2'"))
    size = min(rows * width, 1 << 14)
    body = rng.randbytes(size) if rng.random() < 0.3 else _doubles(rng, size)
    return _PRIMARY + _header([_card(*x) for x in stated.items()]) + body + b"\0" * (-size % BLOCK)


def _doubles(rng: Random, size: int) -> bytes:
    parts = (
        *(b"\0" * 8, b"\x3f\xf0" + b"\0" * 6, b"\x7f\xf0" + b"\0" * 6, b"\x7f\xf8" + b"\0" * 6),
        *(b"\0" * 7 + b"\x04", b"\0" * 7 + b"\x3c", b"\xff" * 8, b"\x3f\xb5" + b"\x55" * 6),
    )
    return b"".join(rng.choices(parts, k=size // 8 + 1))[:size]


def _width(form: str) -> int:
    sizes = {
        "D": 8,
        "K": 8,
        "E": 4,
        "J": 4,
        "I": 2,
        "B": 1,
        "L": 1,
        "A": 1,
        "P": 8,
        "Q": 16,
        "X": 1,
    }
    digits = form[: len(form) - len(form.lstrip("0123456789"))]
    return min(int(digits or 1), 4096) * sizes.get(form.lstrip("0123456789")[:1], 8)


def healpix_file(names: tuple[str, ...]) -> Callable[[Random], bytes]:
    def build(rng: Random) -> bytes:
        forms = (
            "D",
            "D",
            "E",
            "K",
            "J",
            "0D",
            "2D",
            "12D",
            "1PD(9)",
            "1QE()",
            "9A",
            "X",
            "99999X",
            "M",
        )
        columns = [
            (n, rng.choice(forms), rng.choice(UNITS))
            for n in rng.sample(names, rng.randint(1, len(names)))
        ]
        keys = {
            "ORDERING": rng.choice(("'RING'", "'NESTED'", "'NUNIQ'", "'RANGE'", "'x'")),
            "COORDSYS": rng.choice(("'C'", "'G'", "'E'", "'C'")),
            "NSIDE": rng.choice(("1", "2", "536870912", "3", "0", "-1", "1.0", "T", "'1'")),
            "INDXSCHM": rng.choice(("'IMPLICIT'", "'EXPLICIT'")),
        }
        for key in [k for k in keys if rng.random() < 0.15]:
            del keys[key]
        data = table_file(rng, columns, rng.choice((0, 1, 12, 12, 48, 100)), keys)
        return gzip.compress(data, 1, mtime=0) if rng.random() < 0.1 else data

    return build


def image_file(rng: Random) -> bytes:
    kinds = (
        "RA---TAN",
        "DEC--TAN",
        "GLON-CAR",
        "GLAT-CAR",
        "ELON-TAN",
        "TLON-CAR",
        "TLAT-CAR",
        "HPLN-TAN",
    )
    cards = {
        "SIMPLE": "T", "BITPIX": "8", "NAXIS": "2", "NAXIS1": "4", "NAXIS2": "4",
        "CTYPE1": "'RA---TAN'", "CTYPE2": "'DEC--TAN'", "CRPIX1": "2", "CRPIX2": "2",
        "CRVAL1": "150",
        "CRVAL2": "-8", "CD1_1": "-0.1", "CD1_2": "0.0", "CD2_1": "0.0", "CD2_2": "0.1",
        "DATE-OBS": "'2031-03-14T05:30:00'", "EXPTIME": "60.0", "FILTER": "'r'",
    }  # fmt: skip
    for key in [k for k in list(cards)[3:] if rng.random() < 0.1]:
        cards[key] = rng.choice((*NUMBERS, *(f"'{x}'" for x in kinds)))
    if rng.random() < 0.5:
        more = (
            *(
                "A_ORDER",
                "B_ORDER",
                "AP_ORDER",
                "A_2_0",
                "PV1_1",
                "PV2_99",
                "CPDIS1",
                "D2IMARR",
                "WCSAXES",
            ),
            *(
                "EQUINOX",
                "RADESYS",
                "LONPOLE",
                "LATPOLE",
                "CUNIT1",
                "CUNIT2",
                "CROTA2",
                "CDELT1",
                "MJD-OBS",
            ),
            *(
                "PS1_0",
                "PC1_1",
                "CTYPE3",
                "TIMESYS",
                "VELREF",
                "A_DMAX",
                "DP1",
                "DQ1",
                "ZIMAGE",
                "OBSGEO-X",
            ),
        )
        for key in rng.sample(more, rng.randint(1, 4)):
            words = (
                *NUMBERS,
                "'SIP'",
                "'Lookup'",
                "'FK4'",
                "'FK5'",
                "'ALTRP'",
                "'arcsec'",
                "'1950'",
            )
            cards[key] = rng.choice(words)
    if rng.random() < 0.2:
        order = rng.choice(("1", "9", "99", "20000", "999999999"))
        cards |= {
            "CTYPE1": "'RA---TAN-SIP'",
            "CTYPE2": "'DEC--TAN-SIP'",
            "A_ORDER": order,
            "B_ORDER": order,
        }
    data = _header([_card(*x) for x in cards.items()]) + b"\0" * BLOCK
    return gzip.compress(data, 1, mtime=0) if rng.random() < 0.1 else data
