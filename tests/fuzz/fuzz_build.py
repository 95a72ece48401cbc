"""Which files are made from nothing for each reader."""

from __future__ import annotations

from collections.abc import Callable
from random import Random

from fuzz_fits import NUMBERS, healpix_file, image_file, table_file
from fuzz_text import campaign_file, ecsv_file, region_file, text_table_file, votable_file

__all__ = ["BUILDERS"]


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
            return ecsv_file(rng)
        case 1:
            return votable_file(rng)
        case 2:
            columns = [*binary[1:4], rng.choice(binary)]
            return table_file(rng, columns, rng.choice((0, 1, 5)), {})
        case _:
            return text_table_file(names)(rng)


def _moc(rng: Random) -> bytes:
    match rng.randrange(3):
        case 0:
            return healpix_file(("UNIQ", "RANGE", "x"))(rng)
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
            pairs = (f"{rng.choice(words)}: {rng.choice(words)}" for _ in range(2))
            return f"{{{', '.join(pairs)}}}".encode()


BUILDERS: dict[str, Callable[[Random], bytes]] = {
    "map": healpix_file(
        ("UNIQ", "PROBDENSITY", "PROB", "PIXEL", "DISTMU", "DISTSIGMA", "DISTNORM")
    ),
    "dust": healpix_file(("UNIQ", "EBV", "PIXEL", "x")),
    "moc": _moc,
    "log": _log,
    "region": region_file,
    "campaign": campaign_file,
    "claims": text_table_file(("telescope", "quantity", "value", "map", "band", "night", "where")),
    "positions": text_table_file(
        ("name", "ra", "dec", "distance", "mu", "z", "mag", "mass", "absmag")
    ),
    "mosaic": text_table_file(("detector", "xi", "eta")),
    "light_curve": text_table_file(("days", "band", "magnitude")),
    "image": image_file,
}
