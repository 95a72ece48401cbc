"""Text files made from nothing: tables, regions and campaigns with hostile content."""

from __future__ import annotations

from collections.abc import Callable
from random import Random

from fuzz_fits import NUMBERS, UNITS

__all__ = ["campaign_file", "ecsv_file", "region_file", "text_table_file", "votable_file"]

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


def text_table_file(names: tuple[str, ...]) -> Callable[[Random], bytes]:
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
    return rng.choice(CELLS) if rng.random() < 0.15 or name not in _GOOD else _GOOD[name]


def ecsv_file(rng: Random) -> bytes:
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
    if rng.random() < 0.2:
        rng.shuffle(head)
    rows = [rng.choice(("1,2,62939.2", "1 2 62939.2", "1", "")) for _ in range(3)]
    return "\n".join([*head, rng.choice(("ra,dec,start", "ra dec start", "x")), *rows]).encode()


def votable_file(rng: Random) -> bytes:
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


def region_file(rng: Random) -> bytes:
    def number() -> str:
        usual = ("1", "2.5", "-3", "10", "59.9", "1e-9", ".5")
        return rng.choice(NUMBERS if rng.random() < 0.03 else usual)

    def frame() -> str:
        long = "J2000 GEOCENTER SPHERICAL2 "
        return rng.choice(("", "", "ICRS ", "FK5 ", "GALACTIC ", long, "ECLIPTIC "))

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
    if rng.random() < 0.15:
        words = text.split(" ")
        words[rng.randrange(len(words))] = rng.choice(CELLS)
        text = " ".join(words)
    return text.encode("utf-8", "replace")


def campaign_file(rng: Random) -> bytes:
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
        "[telescope]": 'name = "Heron"\ncamera = { shape = "circle", radius = 0.5 }\n'
        'log = "logs/heron.csv"',
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
