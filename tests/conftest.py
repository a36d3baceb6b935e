"""What every test shares: hypothesis repeats itself and never judges by the clock."""

from __future__ import annotations

import hypothesis

hypothesis.settings.register_profile("canticle", derandomize=True, deadline=None, max_examples=100)
hypothesis.settings.load_profile("canticle")
