"""The script that tries other versions knows the floors, and holds pip to them."""

from __future__ import annotations

import pytest
import versions


def test_floors_are_those_of_the_project() -> None:
    held = versions.constraints("floors")
    names = [one.partition("==")[0] for one in held[:6]]
    assert names == ["pandas", "numpy", "scipy", "pyarrow", "statsmodels", "tqdm"]
    assert len(held) == len(versions.requirements())
    assert versions.constraints("pandas2") == ["pandas<3"]
    assert versions.constraints("newest") == []


def test_a_requirement_without_a_floor_is_told() -> None:
    assert versions.floor_of("scipy>=1.15") == ("scipy", "1.15")
    with pytest.raises(SystemExit, match="'scipy'; wanted a name, >= and a version"):
        versions.floor_of("scipy")


def test_this_environment_is_within_the_floors() -> None:
    from importlib.metadata import version

    def parts(text: str) -> list[int]:
        return [int(one) for one in text.split(".")[:3] if one.isdigit()]

    for name, floor in map(versions.floor_of, versions.requirements()):
        assert parts(version(name)) >= parts(floor), name
