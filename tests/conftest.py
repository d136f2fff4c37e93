"""Hypothesis profiles: "quick" by default, the same examples every time; "long" searches at random and for longer.

``python -m pytest --hypothesis-profile=long`` asks for the second.
"""

from hypothesis import settings

settings.register_profile("quick", derandomize=True, deadline=None, max_examples=50, database=None)
settings.register_profile("long", deadline=None, max_examples=2000, print_blob=True)
settings.load_profile("quick")
