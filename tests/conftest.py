"""What every test shares: one hypothesis profile, and a real broker for those that ask for it."""

import gc
import uuid
import warnings

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "bedload", deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("bedload")

ABANDONED = r"unclosed <(ssl\.SSLS|socket\.s)ocket fd=\d+, family=\d+, type=1, proto=6"


def pytest_configure(config):
    """kafka-python drops the socket of each attempt to connect that fails, and the warning hits any test
    that runs then. Its sockets have proto=6, as clients' have; a server's left open by mistake still counts.
    """
    config.addinivalue_line("filterwarnings", f"ignore:{ABANDONED}:ResourceWarning")


def pytest_sessionfinish():
    """Collects what the last test left while that filter still holds; pytest looks again after it."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", ABANDONED, ResourceWarning)
        gc.collect()


@pytest.fixture(scope="session")
def broker(tmp_path_factory):
    """A running broker that all tests of this process share: make topics of your own, and never stop it."""
    from tests.broker import start_or_skip

    with start_or_skip(tmp_path_factory.mktemp("broker")) as running:
        yield running


@pytest.fixture
def own_broker(tmp_path):
    """A running broker of the test's own, to be stopped, killed and paused. Takes some seconds to start."""
    from tests.broker import start_or_skip

    with start_or_skip(tmp_path / "broker") as running:
        yield running


@pytest.fixture
def topic():
    """A name that no other test has; the topic is not made."""
    return f"feed-{uuid.uuid4().hex[:12]}"
