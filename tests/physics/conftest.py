"""Property tests without a deadline: a busy machine is not a mistake in a formula."""

from __future__ import annotations

from hypothesis import settings

settings.register_profile("physics", deadline=None)
settings.load_profile("physics")
