"""The YAML header of an ECSV table, without what YAML can do beyond plain data.

References let a few lines stand for more than any memory holds, and tags build objects;
a table needs neither to name its columns.
"""

from __future__ import annotations

from typing import Any

from astropy.io.misc.yaml import AstropyLoader

__all__ = ["HEADER_LIMIT", "EcsvFault", "read_ecsv_header"]

# Characters; reading takes some ten seconds per million.
HEADER_LIMIT = 256 * 1024
_PLAIN = frozenset(
    f"tag:yaml.org,2002:{kind}"
    for kind in ("map", "seq", "omap", "str", "int", "float", "bool", "null", "timestamp")
)


class EcsvFault(Exception):
    """A header that describes no table; the text ends a sentence about it."""


class _PlainLoader(AstropyLoader):  # type: ignore[misc]
    def compose_node(self, parent: Any, index: Any) -> Any:
        if getattr(self.peek_event(), "anchor", None) is not None:
            raise EcsvFault("it refers from one place to another (& and *)")
        return super().compose_node(parent, index)

    def construct_object(self, node: Any, deep: bool = False) -> Any:
        return super().construct_object(node, deep) if node.tag in _PLAIN else None


def read_ecsv_header(lines: list[str]) -> tuple[dict[str, str], str]:
    """Read names, units and delimiter.

    Parameters
    ----------
    lines : list of str
        The header below its first line, without the leading ``# ``.

    Returns
    -------
    columns : dict of str to str
        Unit, as written, by name.
    delimiter : str
        Between cells.

    Raises
    ------
    EcsvFault
        If it is not such a header.
    """
    text = "\n".join(lines)
    if len(text) > HEADER_LIMIT:
        raise EcsvFault(f"it has more than {HEADER_LIMIT} characters")
    try:
        loader = _PlainLoader(text)
        try:
            meta = loader.get_single_data()
        finally:
            loader.dispose()
        described = [(_scalar(x["name"]), _scalar(x.get("unit"))) for x in meta["datatype"]]
        delimiter = _scalar(meta.get("delimiter", " "))
    except EcsvFault:
        raise
    except Exception as cause:  # the YAML reader raises many kinds
        raise EcsvFault("it is no YAML that describes columns") from cause
    return dict(described), delimiter


def _scalar(value: object) -> str:
    if not isinstance(value, str | int | float | None):
        raise EcsvFault("a name, unit or delimiter in it is no text")
    return "" if value is None else str(value)
