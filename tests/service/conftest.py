"""What the tests of the service share."""

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from tests.service.station import Controller, Nursery


@pytest.fixture(scope="session")
def nursery(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Nursery]:
    made = Nursery(tmp_path_factory.mktemp("nursery"))
    yield made
    made.close()


@pytest.fixture
def make_controller(tmp_path: Path) -> Iterator[Callable[..., Controller]]:
    """Give a function that makes a controller with settings changed."""
    made: list[Controller] = []

    def make(**changes: str) -> Controller:
        made.append(Controller(tmp_path, **changes))
        return made[-1]

    yield make
    for each in made:
        each.close()


@pytest.fixture
def controller(make_controller: Callable[..., Controller]) -> Controller:
    return make_controller()
