"""One hypothesis profile for every run, without time limits; no cache but a test's own."""

from collections.abc import Iterator
from itertools import count
from pathlib import Path

import pytest
from hypothesis import settings

settings.register_profile("ci", derandomize=True, deadline=None, print_blob=True)
settings.load_profile("ci")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption(
        "--campaigns",
        type=int,
        default=10,
        metavar="N",
        help="how many random campaigns the slow twin tallies (200 take some five minutes)",
    )


@pytest.fixture(scope="session")
def cache_folders(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Names of folders, which are made by who needs one."""
    base = tmp_path_factory.mktemp("caches")
    return (base / str(number) for number in count())


@pytest.fixture(autouse=True)
def cache_folder(cache_folders: Iterator[Path], monkeypatch: pytest.MonkeyPatch) -> Path:
    """The cache of the commands that a test runs, out of the user's own, and empty."""
    folder = next(cache_folders)
    monkeypatch.setenv("SKYTALLY_CACHE", str(folder))
    return folder
