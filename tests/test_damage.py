"""A few hundred damaged files in the daily run; many more: python -m tests.damage 100000."""

from collections import Counter
from pathlib import Path

import numpy as np
import pytest

from tests.damage import cases, damaged, judge

KINDS = (
    "task",
    "part",
    "arm",
    "own .csv",
    "own .jsonl",
    "own .npz",
    "own .parquet",
    "foreign .csv",
    "foreign .npz",
    "foreign .parquet",
)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("damage")


@pytest.fixture(scope="module")
def known(folder):
    return cases(folder)


@pytest.mark.parametrize("kind", KINDS)
def test_damaged_files_are_one_line_each(known, folder, kind):
    mine = [case for case in known if case.kind == kind]
    rng = np.random.default_rng()
    seen = Counter()
    for k in range(40):
        case = mine[k % len(mine)]
        content = damaged(case, known, rng)
        try:
            seen[judge(case, content, folder, planned=False)] += 1
        except AssertionError as error:
            kept = folder / f"kept{Path(case.name).suffix}"
            kept.write_bytes(content)
            raise AssertionError(f"{error}: kept as {kept}") from None
    assert seen["status 2"] > 0


@pytest.mark.parametrize("kind", KINDS)
def test_whole_files_are_taken(known, folder, kind):
    """The property above would hold of a command that refuses everything."""
    for case in known:
        if case.kind == kind:
            assert judge(case, case.content, folder, planned=False) == "taken", case.name
