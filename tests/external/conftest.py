"""What the checks on open recordings share."""

import pytest

from sigguard import screening


@pytest.fixture
def no_advice(monkeypatch) -> None:
    """Leaves out scoring again what an act would win back: slow, and of no weight where only verdicts are asked."""
    monkeypatch.setattr(screening, "won_back", lambda *args, **more: ())
