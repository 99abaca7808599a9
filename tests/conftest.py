"""What holds for all tests: property tests have no deadline, because a busy machine is no fault of the code."""

from hypothesis import settings

settings.register_profile("benchkit", deadline=None)
settings.load_profile("benchkit")
