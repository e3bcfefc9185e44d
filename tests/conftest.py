"""Random cases: new ones at every run on a desk, the same ones on the build server, so that a red build can be repeated."""

import os

from hypothesis import settings

# no deadlines: the machine may be busy with other work
settings.register_profile("desk", deadline=None)
settings.register_profile("server", derandomize=True, deadline=None)
settings.load_profile("server" if os.environ.get("CI") else "desk")
