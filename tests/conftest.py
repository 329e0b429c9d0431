"""Settings of the whole test suite."""

import os
import zlib

import pytest
from hypothesis import settings

# No deadline: the first example of a property may compile kernels. The examples are the same in every run, so
# that a failure is the change's own; HYPOTHESIS_PROFILE=explore draws fresh ones.
settings.register_profile("repeatable", deadline=None, derandomize=True, database=None)
settings.register_profile("explore", deadline=None, max_examples=1000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "repeatable"))


def pytest_addoption(parser):
    parser.addoption(
        "--slow-part",
        metavar="K/N",
        help="of the tests marked slow run only the K-th of N parts; a test's part depends on its name alone",
    )


def pytest_collection_modifyitems(config, items):
    part = config.getoption("--slow-part")
    if part is None:
        return
    try:
        wanted, parts = (int(number) for number in part.split("/"))
    except ValueError:
        raise pytest.UsageError(f"--slow-part={part}: must be like 1/3") from None
    if not 1 <= wanted <= parts:
        raise pytest.UsageError(f"--slow-part={part}: the first number must be from 1 to the second")
    left_out = [item for item in items if _is_slow(item) and _part(item, parts) != wanted]
    gone = set(left_out)
    items[:] = [item for item in items if item not in gone]
    config.hook.pytest_deselected(items=left_out)


def _is_slow(item):
    return item.get_closest_marker("slow") is not None


def _part(item, parts):
    return zlib.crc32(item.nodeid.encode()) % parts + 1
