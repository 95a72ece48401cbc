"""Imports only point downward: the layer table as data, and a checker that is itself checked."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest
import skytally

SOURCE = Path(skytally.__file__).parent

# Bottom to top. A module may import modules of its own layer or below, no two one another.
TABLE = (
    "errors findings fits_layout local_files spans moc distance_integrals distance magnitudes "
    "cosmology times grouping workers code_hash cache",
    "shapes pieces raster kept_raster working_order skymap cameras observations volume sources "
    "dust space visibility",
    "healpix_table skymap_circle skymap_frames skymap_table skymap_io dust_io ecsv_header "
    "votable_check table_io log_cells log_columns log_regions log_io image_io region_text "
    "camera_io light_curve_io campaign_faults campaign_model campaign_data campaign_sources "
    "campaign positions_io claims_io",
    "selection footprints patchwork covered field_extinction overlay held touching other_fields",
    "refinement depth deepest tally page_sets sharing reach seen limits exclusion leftover "
    "galaxies where recounts explanations claim_text claims pointings readings audit_maps "
    "audit_rows audit_times audit_depth audit_positions audit_footprints audit",
    "results account serialise",
    "scaffold wording figure_style projection plots limit_plots sky_picture sky_parts sky_frame "
    "sky_chart depth_chart figures limit_figures",
    "report_tables depth_tables page_charts page_data limit_tables sharing_tables audit_tables "
    "house_style report one_telescope circular_text circular_tables circular region_files paper "
    "staging manifest outputs terminal api check_text where_text where_json changes verify "
    "verify_text",
    "cli __main__",
)
LAYERS = {"": 0} | {name: layer for layer, names in enumerate(TABLE) for name in names.split()}


def imported(tree: ast.AST, known: frozenset[str]) -> Iterator[tuple[int, str]]:
    """Yield line and module for every import of the package, at any depth of the code."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                if alias.name == "skytally" or alias.name.startswith("skytally."):
                    yield node.lineno, alias.name.partition(".")[2]
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level == 1:
                base = f"skytally.{base}".rstrip(".")
            if base == "skytally":
                for alias in node.names:
                    yield node.lineno, alias.name if alias.name in known else ""
            elif base.startswith("skytally."):
                yield node.lineno, base.partition(".")[2]
        elif isinstance(node, ast.Call):
            name = getattr(node.func, "attr", getattr(node.func, "id", ""))
            first = node.args[0] if node.args else None
            if (
                name in {"import_module", "__import__"}
                and isinstance(first, ast.Constant)
                and str(first.value).startswith("skytally.")
            ):
                yield node.lineno, str(first.value).partition(".")[2]


def faults(sources: dict[str, str], layers: dict[str, int]) -> list[str]:
    """Return a sentence per upward import, unknown module or circle of imports."""
    known = frozenset(sources)
    found = [f"{name} has no layer" for name in sources if name not in layers]
    edges: dict[str, set[str]] = {}
    for name, text in sources.items():
        for line, target in imported(ast.parse(text), known):
            if target not in layers:
                found.append(f"{name}:{line} imports {target}, which has no layer")
            elif name in layers and layers[target] > layers[name]:
                found.append(f"{name}:{line} imports {target} upward")
            elif target != name:
                edges.setdefault(name, set()).add(target)
    return found + [
        f"{name} imports itself in a circle" for name in sources if circles(name, edges)
    ]


def circles(name: str, edges: dict[str, set[str]]) -> bool:
    """Tell whether a chain of imports leads back to where it began."""
    seen: set[str] = set()
    front = set(edges.get(name, ()))
    while front:
        if name in front:
            return True
        seen |= front
        front = {t for f in front for t in edges.get(f, ())} - seen
    return False


def package_sources() -> dict[str, str]:
    return {
        "" if path.stem == "__init__" else path.stem: path.read_text(encoding="utf-8")
        for path in sorted(SOURCE.glob("*.py"))
    }


def test_imports_point_downward() -> None:
    sources = package_sources()
    assert {"spans", "results", "serialise", "cli"} <= sources.keys()
    # The face of the package hands out names on demand; those imports are the one way up.
    sources[""] = ""
    assert faults(sources, LAYERS) == []


def test_the_package_face_imports_nothing_by_itself() -> None:
    tree = ast.parse((SOURCE / "__init__.py").read_text(encoding="utf-8"))
    own = [
        node
        for node in tree.body
        if isinstance(node, ast.Import | ast.ImportFrom)
        and getattr(node, "module", None) != "__future__"
    ]
    names = {getattr(node, "module", None) or node.names[0].name for node in own}
    assert names <= {"importlib", "typing", "collections.abc"}


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("from skytally.cli import main", "upward"),
        ("import skytally.cli", "upward"),
        ("from skytally import cli", "upward"),
        ("from .cli import main", "upward"),
        ("from . import cli", "upward"),
        ("def f():\n    from skytally.cli import main", "upward"),
        ("class A:\n    def f(self):\n        import skytally.cli as c", "upward"),
        ("if TYPE_CHECKING:\n    from skytally.cli import main", "upward"),
        ("import importlib\nimportlib.import_module('skytally.cli')", "upward"),
        ("from skytally.unheard import x", "no layer"),
    ],
)
def test_the_checker_sees_an_upward_import(text: str, word: str) -> None:
    found = faults({"low": text, "cli": "", "": ""}, {"": 0, "low": 1, "cli": 8})
    assert len(found) == 1
    assert word in found[0]
    assert found[0].startswith("low:")


def test_the_checker_allows_downward_and_outside_imports() -> None:
    text = (
        "import numpy\nfrom skytally.low import f\nfrom skytally import __version__\nf('skytally')"
    )
    assert faults({"low": "", "cli": text, "": ""}, {"": 0, "low": 1, "cli": 8}) == []


def test_the_checker_sees_a_circle_within_a_layer_and_a_module_without_one() -> None:
    layers = {"a": 1, "b": 1, "c": 1}
    circle = {"a": "import skytally.b", "b": "import skytally.c", "c": "import skytally.a"}
    assert [f.split()[0] for f in faults(circle, layers)] == ["a", "b", "c"]
    assert faults({"new": ""}, {}) == ["new has no layer"]
