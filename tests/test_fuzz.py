"""Damaged fleet folders: refused, not met or called whole; never a defect, a part of a record, or a minute gone."""

import pytest
from fuzz import LONGEST_S, damaged, remembering, tried

ORDINARY, ALL = 300, 10_000


def run(count: int, base) -> dict[str, int]:
    """How many ended how; fails naming every fault with the number it can be made again from."""
    with remembering():
        outcomes = [tried(number, base) for number in range(count)]
    faults = [f"{one.number} ({one.damage}): {one.fault}" for one in outcomes if one.fault]
    assert faults == []
    assert max(one.seconds for one in outcomes) < LONGEST_S
    ends = [one.end for one in outcomes]
    return {end: ends.count(end) for end in sorted(set(ends))}


def test_damaged_folders_are_refused_or_called_whole(tmp_path):
    ends = run(ORDINARY, tmp_path)
    assert set(ends) <= {"called", "not met", "refused", "refused by check"}
    assert ends["refused by check"] > ORDINARY // 2
    assert ends["called"] > ORDINARY // 20, "some damage does no harm, and the way to a record stays open"
    assert list(tmp_path.iterdir()) == []


@pytest.mark.slow
def test_ten_thousand_damaged_folders(tmp_path):
    assert sum(run(ALL, tmp_path).values()) == ALL


def test_a_number_gives_the_same_damage_again(tmp_path):
    first, again = damaged(7, tmp_path / "a"), damaged(7, tmp_path / "b")
    assert first == again
    for path in (tmp_path / "a").iterdir():
        assert path.is_dir() or path.read_bytes() == (tmp_path / "b" / path.name).read_bytes()
