"""A folder of templates that override blocks of the report, in a sandbox.

Templates of a folder are read as a guest's: they see the results and our words,
read no file outside the folder, reach nothing private, call only what hands out
text, and end after a stated number of steps.
"""

from __future__ import annotations

import base64
import hashlib
import traceback
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from difflib import get_close_matches
from importlib.resources import files
from pathlib import Path
from typing import Any

from jinja2 import BaseLoader, Environment, StrictUndefined, Template, nodes
from jinja2.exceptions import (
    TemplateError,
    TemplateNotFound,
    TemplateRuntimeError,
    TemplateSyntaxError,
)
from jinja2.runtime import BlockReference, LoopContext, Macro
from jinja2.sandbox import ImmutableSandboxedEnvironment
from jinja2.utils import Cycler, Joiner
from markupsafe import Markup

from skytally.errors import InputError
from skytally.figure_style import swatch_svg
from skytally.results import Results
from skytally.wording import count, percent, utc_text

__all__ = ["HouseStyle", "own_template"]

REPORT = "report.html.j2"
# Whatever the folder holds, names that begin so are ours.
OURS = "skytally/"
SIZE_LIMIT_BYTES = 1024 * 1024
# Turns of loops, calls and templates fetched; a night of thousands of exposures takes a hundredth.
STEP_LIMIT = 5_000_000

_BEGINNING = f'{{% extends "{OURS}{REPORT}" %}}'
_REMEDY = "Correct the template, or run without --templates."
# Whose methods a template may call, beside the functions that it is given.
_MAY_CALL_METHODS_OF = (
    *(str, int, float, tuple, list, dict, Results),
    *(BlockReference, Cycler, Joiner, LoopContext, Macro),
)


def own_template(name: str) -> str:
    """Return the text of one of our templates, style sheets or scripts, wherever installed."""
    return (files("skytally.templates") / name).read_text(encoding="utf-8")


@dataclass(frozen=True)
class HouseStyle:
    """Where the report's templates come from; without a folder, ours alone.

    Attributes
    ----------
    folder : Path or None
        Looked in first; ``skytally/…`` are always our own.
    """

    folder: Path | None = None

    @classmethod
    def read(cls, folder: str | Path) -> HouseStyle:
        """Take a folder of templates, and try whether its report can be read.

        Raises
        ------
        InputError
            If there is no such folder or no ``report.html.j2`` in it, or if that
            is broken, does not extend ours, or defines a block that ours lacks.
        """
        place = Path(folder)
        if not place.is_dir():
            raise InputError(
                "there is no folder of that name",
                file=place,
                remedy=f"Give --templates a folder with a {REPORT}.",
            )
        if not (place / REPORT).exists():
            raise InputError(
                f"the folder holds no {REPORT}",
                file=place,
                remedy=f"Begin one with {_BEGINNING}.",
            )
        style = cls(place)
        with style._sandbox() as sandbox:
            sandbox.get_template(REPORT)
        return style

    def render(self, context: Mapping[str, Any]) -> str:
        """Render the report.

        Raises
        ------
        InputError
            If a template of the folder fails; it names file and line.
        """
        with self._sandbox() as sandbox:
            return sandbox.get_template(REPORT).render(context)

    @contextmanager
    def _sandbox(self) -> Iterator[_Sandbox]:
        loader = _Loader(self.folder)
        try:
            yield _Sandbox(loader)
        except (InputError, MemoryError):
            raise
        except Exception as error:
            _blame(error, loader.read)
            raise


@dataclass(frozen=True)
class _Heritage:
    """What a template is built on at last, and the blocks that it has of all its forebears."""

    root: str
    blocks: frozenset[str]


class _Loader(BaseLoader):
    """Templates of the folder, then ours; under ``skytally/`` ours at once.

    ``read`` holds the files of the folder that were used.
    """

    def __init__(self, folder: Path | None) -> None:
        self.folder = folder
        self.read: set[str] = set()

    def get_source(
        self, environment: Environment, template: str
    ) -> tuple[str, str | None, Callable[[], bool] | None]:
        if "\x00" in template or template.startswith("/") or ".." in Path(template).parts:
            raise TemplateNotFound(template, f"{template!r} does not lie in the folder")
        if self.folder is not None and not template.startswith(OURS):
            path = self.folder / template
            if path.exists():
                _check_inside(path, self.folder)
                self.read.add(str(path))
                return _text(path), str(path), None
        try:
            return own_template(template.removeprefix(OURS)), None, None
        except OSError:
            raise TemplateNotFound(template) from None


def _check_inside(path: Path, folder: Path) -> None:
    if not path.resolve().is_relative_to(folder.resolve()) or not path.is_file():
        raise InputError(
            "it is no file inside the folder of templates",
            file=path,
            remedy="Copy it there; links that lead out of the folder are not followed.",
        )


def _text(path: Path) -> str:
    if path.stat().st_size > SIZE_LIMIT_BYTES:
        raise InputError(
            f"the template is larger than {SIZE_LIMIT_BYTES // 1024} KiB",
            file=path,
            remedy=_REMEDY,
        )
    try:
        return path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        line = error.object[: error.start].count(b"\n") + 1
        raise InputError(
            f"line {line}: the template is not UTF-8 text", file=path, remedy="Save it as UTF-8."
        ) from None


class _Sandbox(ImmutableSandboxedEnvironment):
    """One rendering: everything escaped, nothing undefined, every step counted."""

    def __init__(self, loader: _Loader) -> None:
        super().__init__(
            loader=loader,
            autoescape=True,
            undefined=StrictUndefined,
            trim_blocks=True,
            lstrip_blocks=True,
        )
        del self.globals["lipsum"]  # It makes text without end.
        self.globals.update(digest=_digest, count=count, swatch=_swatch)
        self.filters.update(utc=utc_text, percent=percent, _counted=self._counted)
        self._steps = 0
        self._read: dict[str, _Heritage] = {}
        self._reading: list[str] = []

    def is_safe_attribute(self, obj: Any, attr: str, value: Any) -> bool:
        """Allow data, and methods of plain things: an array could write itself to a file."""
        if not super().is_safe_attribute(obj, attr, value):
            return False
        return (
            not callable(value) or isinstance(value, Macro) or isinstance(obj, _MAY_CALL_METHODS_OF)
        )

    def call(self, *args: Any, **kwargs: Any) -> Any:
        """Call as usual, and count it."""
        self._step()
        return super().call(*args, **kwargs)

    def get_template(self, *args: Any, **kwargs: Any) -> Template:
        """Fetch as usual, and count it."""
        self._step()
        return super().get_template(*args, **kwargs)

    def compile(self, source: Any, name: Any = None, filename: Any = None, *rest: Any) -> Any:
        """Compile as usual, with every turn of a loop counted and every block known."""
        tree = self.parse(source, name, filename)
        self._reading.append(name)
        self._read[name] = self._heritage(tree, name, filename)
        self._reading.pop()
        for loop in list(tree.find_all(nodes.For)):
            loop.iter = nodes.Filter(
                *(loop.iter, "_counted", [], [], None, None),
                lineno=loop.iter.lineno,
                environment=self,
            )
        return super().compile(tree, name, filename, *rest)

    def _heritage(self, tree: nodes.Template, name: str, filename: str | None) -> _Heritage:
        """Refuse a block that would never be shown, and a report that is not built on ours."""

        def fault(message: str, line: int) -> TemplateSyntaxError:
            return TemplateSyntaxError(message, line, name, filename)

        own = frozenset(block.name for block in tree.find_all(nodes.Block))
        parent = next((node for node in tree.body if isinstance(node, nodes.Extends)), None)
        if parent is None or not isinstance(parent.template, nodes.Const):
            if name == REPORT and filename is not None:
                raise fault(f"it must begin with {_BEGINNING}", 1)
            return _Heritage(name, own)
        base = str(parent.template.value)
        if base in self._reading:
            raise fault(f"it extends itself; ours is extended by {_BEGINNING}", parent.lineno)
        try:
            self.get_template(base)
        except TemplateNotFound as error:
            raise fault(_missing(error), parent.lineno) from None
        root, inherited = self._read[base].root, self._read[base].blocks
        if name == REPORT and root != OURS + REPORT:
            raise fault(f"{base} must begin with {_BEGINNING}", parent.lineno)
        for block in _outermost_blocks(tree):
            if block.name not in inherited:
                near = get_close_matches(block.name, inherited, 1)
                known = f"the nearest is {near[0]!r}" if near else f"it has {_listed(inherited)}"
                raise fault(f"{base} has no block {block.name!r}; {known}", block.lineno)
        return _Heritage(root, inherited | own)

    def _counted(self, items: Iterable[Any]) -> Iterator[Any]:
        for item in items:
            self._step()
            yield item

    def _step(self) -> None:
        self._steps += 1
        if self._steps > STEP_LIMIT:
            raise TemplateRuntimeError(
                f"the template takes more than {STEP_LIMIT:,} steps; look for loops in loops"
            )


def _swatch(index: int) -> Markup:
    return Markup(swatch_svg(index))


def _digest(text: str) -> str:
    """Return the SHA-256 of text as a content security policy states it."""
    return base64.b64encode(hashlib.sha256(str(text).encode()).digest()).decode()


def _listed(names: Iterable[str]) -> str:
    return ", ".join(sorted(names))


def _outermost_blocks(node: nodes.Node) -> Iterator[nodes.Block]:
    """Yield the blocks that lie in no other: those that override."""
    for child in node.iter_child_nodes():
        if isinstance(child, nodes.Block):
            yield child
        else:
            yield from _outermost_blocks(child)


def _blame(error: Exception, files: set[str]) -> None:
    """Raise what went wrong with the file and line of the folder; return if none took part."""
    place: tuple[str, int] | None = None
    for frame, line in traceback.walk_tb(error.__traceback__):
        if frame.f_code.co_filename in files:
            place = frame.f_code.co_filename, line
    if isinstance(error, TemplateSyntaxError) and error.filename in files:
        place = error.filename, error.lineno
    if place is None:
        return
    if isinstance(error, TemplateNotFound):
        message = _missing(error)
    elif isinstance(error, TemplateError):
        message = error.message or type(error).__name__
    elif isinstance(error, RecursionError):
        message = "templates or macros call one another without end"
    else:
        message = f"it fails with {type(error).__name__} ({error})"
    file, line = place
    raise InputError(f"line {line}: {message}", file=file, remedy=_REMEDY) from error


def _missing(error: TemplateNotFound) -> str:
    return f"there is no template {error.name!r}" if error.message == error.name else str(error)
