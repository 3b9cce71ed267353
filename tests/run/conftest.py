"""The program, loaded once for all tests of this folder."""

from collections.abc import Iterator

import pytest
from tests.run.program import Program


@pytest.fixture(scope="session")
def program(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Program]:
    with Program(tmp_path_factory.mktemp("processes")) as program:
        yield program
