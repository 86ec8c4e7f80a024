"""What all tests share: property tests are not timed, and modules beside this one can be imported."""

from hypothesis import settings

settings.register_profile("untimed", deadline=None)
settings.load_profile("untimed")

collect_ignore_glob = ["conftest.py", "*/conftest.py"]
"""Not searched for doctests: two modules of one name cannot be imported side by side."""
