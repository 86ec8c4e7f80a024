"""What all tests share: property tests are not timed, and modules beside this one can be imported."""

from hypothesis import settings

settings.register_profile("untimed", deadline=None)
settings.load_profile("untimed")
