"""What all tests share."""

import os

from hypothesis import settings

# The gate tries the same examples every time; a run by hand, and the campaigns, look for new ones.
settings.register_profile("gate", derandomize=True, deadline=None)
if os.environ.get("CI"):
    settings.load_profile("gate")
