"""Settings shared by all tests: hypothesis draws the same examples every time and never watches the clock."""

from hypothesis import settings

settings.register_profile("driblet", deadline=None, derandomize=True, database=None)
settings.load_profile("driblet")
