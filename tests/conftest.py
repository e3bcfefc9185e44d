"""Random cases: new ones at every run on a desk, the same ones on the build server, so that a red build can be repeated."""

import os

from hypothesis import settings

settings.register_profile("server", derandomize=True, deadline=None)
if os.environ.get("CI"):
    settings.load_profile("server")
