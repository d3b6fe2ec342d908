"""The order of the tests: what takes longest comes first, so that all processes are busy to the end."""

from pathlib import Path

TESTS = Path(__file__).parent
#: Waits more than it computes, so that the others can go on beside it.
WAITS = "test_slurm.py"
LONG = ("workflow", "faults", "benchmarks", "fuzzing")


def pytest_collection_modifyitems(items):
    """What waits, real runs, then what repeats itself, then the rest; within each the order stays."""

    def place(item):
        folder = item.path.relative_to(TESTS).parts[0]
        return (item.path.name != WAITS, LONG.index(folder) if folder in LONG else len(LONG))

    items.sort(key=place)
