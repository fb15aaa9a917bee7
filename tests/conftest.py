"""Settings for every test: the fast suite is a fixed-seed sample, so that a red run can be repeated.

Set HYPOTHESIS_PROFILE=search to let hypothesis look for new examples by hand.
"""

import os

from hypothesis import settings

settings.register_profile("fixed", derandomize=True, deadline=None)
settings.register_profile("search", deadline=None)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "fixed"))
