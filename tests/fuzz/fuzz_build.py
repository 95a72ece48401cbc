"""Files made from nothing: of the right shape, with hostile content in one place or many."""

from __future__ import annotations

import gzip
from collections.abc import Callable
from random import Random

__all__ = ["BUILDERS"]

CARD, BLOCK = 80, 2880
NUMBERS = (
    *("0", "1", "-1", "12", "29", "30", "48", "64", "999", "1000000", "2147483647", "-2147483648"),
    *("4294967296", "9223372036854775807", "-9223372036854775808", "99999999999999999999", "1e300"),
    *("nan", "inf", "-inf", "1e999", "0.5", "-0.0", "T", "''", "'x'", "(1,2)", "1E-320", "0x10"),
)
CELLS = (
    *("", "nan", "inf", "-99", "99.9", ">20", "<=20.5*", "~", "N/A", "1e5", "0012", "1,5", "1.2.3"),
    *("10:20:30", "10h20m30s", "-31d04m12s", "10:60:00", "-00:00:01", "1e308", "1e-400", "361"),
    *("2031-03-14T05:30:00Z", "2031-02-30T05:30:00", "2031-03-14 24:00", "2031-03-14T05:30:60"),
    *(
        "62939.25",
        "2462939.75",
        "1e400",
        "9" * 100,
        " " * 90,
        "(" * 50,
        "=1+1",
        "@SUM(A1)",
        "\u202eabc",
    ),
    *("polygon 1 2 3 4 5 6", "circle 1 2 3", "circle 1 91 3", "x.json", "../../../etc/passwd.txt"),
    *(
        "http://skytally.invalid/x.fits",
        "'",
        '"a',
        "{{x}}",
        "<b>",
        "\x1b[31m",
        "\0",
        "é",
        "Performed",
    ),
    *("43.5 %", "0.435", "1,204", "254 deg2", "1e99", "0.1e-99", "20.1 mag", "٣", "1_0", "−5"),
)
NAMES = (
    *(
        "ra",
        "dec",
        "start",
        "end",
        "duration",
        "band",
        "depth",
        "angle",
        "quality",
        "region",
        "fov",
    ),
    *(
        "exposure",
        "extinction",
        "execution_status",
        "s_region",
        "t_min",
        "t_max",
        "s_fov",
        "RA (hours)",
    ),
    *("ra [rad]", "exptime (min)", "", "ra", "x" * 3000, "a" + " " * 300 + "b", "(" * 40, "\u202e"),
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


def _table(
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


def _healpix(names: tuple[str, ...]) -> Callable[[Random], bytes]:
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
        data = _table(rng, columns, rng.choice((0, 1, 12, 12, 48, 100)), keys)
        return gzip.compress(data, 1, mtime=0) if rng.random() < 0.1 else data

    return build


def _text_table(names: tuple[str, ...]) -> Callable[[Random], bytes]:
    def build(rng: Random) -> bytes:
        mark = rng.choice((",", ",", ",", ";", "\t"))
        chosen = rng.sample(names, rng.randint(1, len(names)))
        if rng.random() < 0.3:
            chosen.insert(rng.randrange(len(chosen)), rng.choice(NAMES))
        quote = rng.random() < 0.5
        lines = [mark.join(chosen)]
        for _ in range(rng.choice((0, 1, 2, 5, 20))):
            cells = [_cell(rng, name) for name in chosen]
            lines.append(mark.join(f'"{x}"' if quote and mark in x else x for x in cells))
        text = rng.choice(("\n", "\n", "\r\n", "\r")).join(lines)
        return text.encode(rng.choice(("utf-8", "utf-8", "utf-8-sig", "utf-16")), "replace")

    return build


_GOOD = {
    "ra": "150.5", "dec": "-12.5", "start": "62939.25", "t_min": "62939.25", "t_max": "62939.26",
    "end": "62939.26", "region": "circle 1 2 3", "s_region": "circle 1 2 3", "telescope": "Heron",
    "quantity": "probability", "value": "43.5 %", "detector": "A", "xi": "0.5", "eta": "0.5",
    "days": "1", "band": "r", "magnitude": "-15", "z": "0.1", "distance": "40", "fov": "1",
}  # fmt: skip


def _cell(rng: Random, name: str) -> str:
    return rng.choice(CELLS) if rng.random() < 0.25 or name not in _GOOD else _GOOD[name]


def _ecsv(rng: Random) -> bytes:
    """Return ECSV whose YAML header may be nested, aliased, tagged or wrong."""
    name = rng.choice(
        ("ra", "[a]", "{a: b}", "&a ra", "*a", "!!python/name:os.system x", "'ra'", "[" * 200)
    )
    unit = rng.choice(
        (*UNITS, "&u [x]", "[*u, *u]", "!astropy.units.Unit {unit: deg}", "!!binary aa", "1")
    )
    kind = rng.choice(("float64", "string", "object", "[x]"))
    head = [
        "# %ECSV 1.0",
        "# ---",
        rng.choice(("# delimiter: ','", "# delimiter: ' '", "# delimiter: {a: b}", "#")),
        "# datatype:",
        f"# - {{name: {name}, unit: {unit}, datatype: {kind}}}",
        "# - {name: dec, datatype: float64}",
        "# - {name: start, datatype: float64}",
        rng.choice(
            (
                "# schema: astropy-2.0",
                "# meta: !!omap [{a: 1}]",
                "# meta: &m {<<: *m}",
                "# - x",
                "#\tx",
            )
        ),
    ]
    rng.random() < 0.2 and rng.shuffle(head)
    rows = [rng.choice(("1,2,62939.2", "1 2 62939.2", "1", "")) for _ in range(3)]
    return "\n".join([*head, rng.choice(("ra,dec,start", "ra dec start", "x")), *rows]).encode()


def _votable(rng: Random) -> bytes:
    """Return a VOTable with lies in its attributes."""
    kind = rng.choice(
        ("double", "char", "int", "bit", "boolean", "unicodeChar", "floatComplex", "x", "")
    )
    size = rng.choice(
        ("", ' arraysize="*"', ' arraysize="999999999"', ' arraysize="3x*"', ' arraysize="-1"')
    )
    more = rng.choice(
        (
            "",
            ' unit="((("',
            ' xtype="circle"',
            ' precision="E9999"',
            ' width="-1"',
            ' ref="a" ID="a"',
        )
    )
    cell = rng.choice(CELLS).replace("<", "&lt;").replace("\0", "").replace("\x1b", "")
    fields = "".join(
        f'<FIELD name="{x}" datatype="{kind}"{size}{more}/>' for x in ("ra", "dec", "start")
    )
    null = rng.choice(("", '<VALUES null="x"/>'))
    row = f"<TR>{f'<TD>{cell}</TD>' * rng.choice((0, 2, 3, 3, 3, 4))}</TR>"
    data = rng.choice(
        (
            f"<TABLEDATA>{row * rng.choice((0, 1, 3))}</TABLEDATA>",
            '<BINARY><STREAM encoding="base64">AAAAAAAAAAAAAAAA</STREAM></BINARY>',
            '<BINARY2><STREAM encoding="base64">//////8A</STREAM></BINARY2>',
            '<BINARY><STREAM encoding="gzip">AAAA</STREAM></BINARY>',
            '<FITS extnum="1"><STREAM encoding="base64">U0lNUExF</STREAM></FITS>',
            '<BINARY><STREAM href="file:///etc/hostname"/></BINARY>',
            "<PARQUET><STREAM href='x'/></PARQUET>",
        )
    )
    rows = rng.choice(("", "", ' nrows="999999999999"', ' nrows="-5"', ' nrows="x"'))
    head = rng.choice(
        (
            '<?xml version="1.0"?>',
            '<?xml version="1.0" encoding="utf-16"?>',
            '<!DOCTYPE a [<!ENTITY b SYSTEM "file:///etc/hostname">]>',
            "",
        )
    )
    version = rng.choice(("1.4", "1.1", "9.9", "x"))
    body = f"<TABLE{rows}>{fields}{null}<DATA>{data}</DATA></TABLE>"
    body = rng.choice((body, f"{'<RESOURCE>' * 50}{body}{'</RESOURCE>' * 50}", body + body, ""))
    return f'{head}<VOTABLE version="{version}"><RESOURCE>{body}</RESOURCE></VOTABLE>'.encode()


def _log(rng: Random) -> bytes:
    names = (
        "exposure",
        "ra",
        "dec",
        "start",
        "end",
        "duration",
        "band",
        "depth",
        "region",
        "fov",
        "quality",
    )
    binary = tuple(
        (n, rng.choice(("D", "E", "J", "10A", "L", "2D", "1PE()", "C", "0A")), "") for n in names
    )
    match rng.randrange(8):
        case 0:
            return _ecsv(rng)
        case 1:
            return _votable(rng)
        case 2:
            columns = [*binary[1:4], rng.choice(binary)]
            return _table(rng, columns, rng.choice((0, 1, 5)), {})
        case _:
            return _text_table(names)(rng)


def _region(rng: Random) -> bytes:
    number = lambda: rng.choice(("1", "2.5", "-3", "10", "359.9", "1e-9", "90", ".5", *NUMBERS))  # noqa: E731
    frame = lambda: rng.choice(
        ("", "", "ICRS ", "FK5 ", "GALACTIC ", "J2000 GEOCENTER SPHERICAL2 ", "ECLIPTIC ")
    )  # noqa: E731

    def shape(depth: int) -> str:
        match rng.randrange(8 if depth else 5):
            case 0:
                return f"Circle {frame()}{number()} {number()} {number()}"
            case 1:
                return f"Box {frame()}{number()} {number()} {number()} {number()}"
            case 2 | 3:
                count = rng.choice((1, 2, 3, 3, 4, 8))
                return f"Polygon {frame()}" + " ".join(number() for _ in range(2 * count))
            case 4:
                inner = ", ".join(
                    f"POINT('{frame().strip()}', {number()}, {number()})" for _ in range(3)
                )
                return f"POLYGON('ICRS', {inner})"
            case _:
                name = rng.choice(("Union", "Intersection", "Difference", "Not"))
                parts = " ".join(shape(depth - 1) for _ in range(rng.choice((1, 2, 3))))
                return f"{name} {frame()}({parts})"

    text = shape(rng.choice((0, 1, 3)))
    if rng.random() < 0.1:
        text = "Not (" * rng.choice((31, 33, 2000)) + text
    if rng.random() < 0.3:
        words = text.split(" ")
        words[rng.randrange(len(words))] = rng.choice(CELLS)
        text = " ".join(words)
    return text.encode("utf-8", "replace")


def _campaign(rng: Random) -> bytes:
    """Return a campaign with one value, or the shape of a table, replaced."""
    value = rng.choice(
        (
            *(
                "1",
                "-1",
                "0",
                "1e999",
                "nan",
                "inf",
                "true",
                '""',
                '"x"',
                "[]",
                "{}",
                "[[]]",
                '"\\u0000"',
            ),
            *(
                '"http://skytally.invalid/a"',
                '"../../../../etc/passwd"',
                '"/dev/zero"',
                '"\\u202ex"',
            ),
            *("0x" + "f" * 5000, "1" * 4400, "2031-03-14", "05:21:08", "1900-01-01T00:00:00+23:59"),
            *(
                "9999-12-31T23:59:59-23:59",
                "[" * 400 + "]" * 400,
                "{a.b.c.d = 1}",
                '"' + "x" * 5000 + '"',
            ),
            *(
                "[" + "1," * 2000 + "]",
                '{ "\\n" = 1 }',
                "'''\n'''",
                '["a", 1, {}]',
                "2031-03-14T05:21:08.9999999999Z",
            ),
        )
    )
    keys = {
        "event": ("name", "time", "x"),
        "settings": (
            "magnitude_system",
            "significance",
            "bracket",
            "revisit",
            "revisit.visits",
            "cosmology",
        ),
        "extinction": ("map", "coefficients", "coefficients.r", "allow_holes"),
        "audit": ("airmass", "demote", "silence", "moon"),
        "report": ("authors", "thanks", "affiliations"),
        "[map]": ("version", "file", "circle", "issued", "circle.ra"),
        "[telescope]": (
            "name",
            "site",
            "camera",
            "log",
            "images",
            "mask",
            "depth",
            "defaults",
            "searchable",
        ),
        "[source]": ("name", "magnitude", "fade", "light_curve", "detection", "visits"),
        "[claim]": ("file", "telescope", "quantity", "value", "night"),
    }
    good = {
        "event": 'name = "Lantern 7"\ntime = 2031-03-14T05:21:08Z',
        "[map]": 'version = "1"\ncircle = { ra = 150.2, dec = -8.1, radius_90 = 2.5 }',
        "[telescope]": 'name = "Heron"\ncamera = { shape = "circle", radius = 0.5 }\nlog = "logs/heron.csv"',
    }
    chosen = rng.choice(list(keys))
    key = rng.choice(keys[chosen])
    tables = dict(good)
    lines = [
        x
        for x in tables.get(chosen, "").split("\n")
        if x and not x.startswith(key.split(".")[0] + " ")
    ]
    if rng.random() < 0.1:
        key += ".a" * rng.choice((1, 30, 3000))
    tables[chosen] = "\n".join([*lines, f"{key} = {value}"])
    if rng.random() < 0.05:
        tables[rng.choice(('"("', "x", "[[x]]", '"' + "('" * 300 + '"', "a.b.c"))] = "y = 1"
    return "\n".join(f"[{name}]\n{body}" for name, body in tables.items()).encode()


def _image(rng: Random) -> bytes:
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
        "CTYPE1": "'RA---TAN'", "CTYPE2": "'DEC--TAN'", "CRPIX1": "2", "CRPIX2": "2", "CRVAL1": "150",
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


def _moc(rng: Random) -> bytes:
    match rng.randrange(3):
        case 0:
            return _healpix(("UNIQ", "RANGE", "x"))(rng)
        case 1:
            parts = [
                rng.choice(("0/", "1/", "29/", "30/", "3-5", "5-3", "12", *NUMBERS))
                for _ in range(6)
            ]
            return " ".join(parts).encode()
        case _:
            words = (
                '"1"',
                '"29"',
                '"30"',
                '"x"',
                '"٣"',
                "1",
                "[]",
                "[1,2]",
                "[-1]",
                "[1e3]",
                "{}",
                "null",
                "[" * 500,
            )
            return f"{{{rng.choice(words)}: {rng.choice(words)}, {rng.choice(words)}: {rng.choice(words)}}}".encode()


BUILDERS: dict[str, Callable[[Random], bytes]] = {
    "map": _healpix(("UNIQ", "PROBDENSITY", "PROB", "PIXEL", "DISTMU", "DISTSIGMA", "DISTNORM")),
    "dust": _healpix(("UNIQ", "EBV", "PIXEL", "x")),
    "moc": _moc,
    "log": _log,
    "region": _region,
    "campaign": _campaign,
    "claims": _text_table(("telescope", "quantity", "value", "map", "band", "night", "where")),
    "positions": _text_table(("name", "ra", "dec", "distance", "mu", "z", "mag", "mass", "absmag")),
    "mosaic": _text_table(("detector", "xi", "eta")),
    "light_curve": _text_table(("days", "band", "magnitude")),
    "image": _image,
}
