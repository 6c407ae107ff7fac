"""Settings that all tests share."""

from hypothesis import settings

# Machines are shared: a slow moment is no fault of the code.
settings.register_profile("diag", deadline=None, print_blob=True)
settings.load_profile("diag")
