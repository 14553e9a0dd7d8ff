"""Settings for every test: hypothesis draws the same examples in every run, and keeps no files."""

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "oakum",
    derandomize=True,
    deadline=None,
    database=None,
    max_examples=60,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
settings.load_profile("oakum")


def pytest_addoption(parser: pytest.Parser) -> None:
    """`--long` runs the long versions of tests that have one, as for a nightly run."""
    parser.addoption("--long", action="store_true", help="run the long versions of sweeps (hours)")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Long versions may take as long as they need."""
    for item in items if config.getoption("--long") else ():
        item.add_marker(pytest.mark.timeout(0))


@pytest.fixture(scope="session")
def long(request: pytest.FixtureRequest) -> bool:
    """Whether the long versions are wanted."""
    return bool(request.config.getoption("--long"))
