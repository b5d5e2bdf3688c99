"""How the property tests of air data run: the same examples each time, and no clock."""

from hypothesis import settings

repeatable = settings(derandomize=True, deadline=None, max_examples=300)
