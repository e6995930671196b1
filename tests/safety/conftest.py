"""Every example is drawn the same way at every run."""

from __future__ import annotations

from hypothesis import settings

settings.register_profile("same every time", derandomize=True, deadline=None)
settings.load_profile("same every time")
