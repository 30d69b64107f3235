"""Whatever may stand in a parsed body, for tests that must not care."""

from __future__ import annotations

from hypothesis import strategies as st

NUMBERS = st.integers() | st.floats() | st.decimals()
ANYTHING = st.recursive(
    st.none() | st.booleans() | NUMBERS | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=8,
)
