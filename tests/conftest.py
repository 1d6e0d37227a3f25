"""What all tests share: the choice of slow tests, and that no test is timed."""

import zlib

from hypothesis import settings

settings.register_profile("untimed")
settings.load_profile("untimed")


def pytest_addoption(parser):
    parser.addoption(
        "--slow-sample",
        type=int,
        default=1,
        metavar="N",
        help="run one in N of the tests marked slow, always the same ones (default: all)",
    )


def pytest_collection_modifyitems(config, items):
    every = max(config.getoption("--slow-sample"), 1)
    slow = [item for item in items if item.get_closest_marker("slow")]
    # an order that does not change when tests are added elsewhere
    slow.sort(key=lambda item: zlib.crc32(item.nodeid.encode()))
    left_out = set(slow[-(-len(slow) // every) :])
    if left_out:
        config.hook.pytest_deselected(items=[item for item in items if item in left_out])
        items[:] = [item for item in items if item not in left_out]
