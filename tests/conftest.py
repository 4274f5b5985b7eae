"""What holds for every test."""

from hypothesis import settings

# how long an example takes is the machine's business
settings.register_profile("patient", deadline=None)
settings.load_profile("patient")
