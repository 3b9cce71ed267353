"""``--renew-goldens`` writes the stored output anew; read the difference before you commit it."""

import pytest


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--renew-goldens", action="store_true", help="write the stored output anew")
