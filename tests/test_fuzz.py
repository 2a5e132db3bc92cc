"""A few examples of every property of arbitrary input; `python tests/fuzz.py --minutes 10` runs many."""

from __future__ import annotations

import pytest
from fuzz import examine
from fuzz_properties import PROPERTIES, World


@pytest.fixture(scope="module")
def world(tmp_path_factory: pytest.TempPathFactory) -> World:
    return World(tmp_path_factory.mktemp("fuzz"))


@pytest.mark.parametrize("name", PROPERTIES)
def test_only_our_errors_come_out_and_what_is_accepted_is_consistent(world: World, name: str) -> None:
    assert examine(PROPERTIES[name], world, PROPERTIES[name].quick) >= PROPERTIES[name].quick // 2
