"""Fixtures for all tests."""

from __future__ import annotations

import pytest

from tests.plans import Plans, shared_plans


@pytest.fixture(scope="session")
def plans(tmp_path_factory: pytest.TempPathFactory) -> Plans:
    """Plans of the example problems and of the reference cases, each made once."""
    return shared_plans(tmp_path_factory)
