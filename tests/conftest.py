"""One hypothesis profile for every run: the same examples each time, and no time limits."""

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
