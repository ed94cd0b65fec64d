"""How long the fuzz tests run: LIMBTELL_FUZZ_EXAMPLES=100000 for a longer hunt."""

from __future__ import annotations

import os

from hypothesis import HealthCheck, settings
from hypothesis import strategies as st

fuzz = settings(
    max_examples=int(os.environ.get("LIMBTELL_FUZZ_EXAMPLES", "150")),
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)

# Anything msgpack can say, the awkward numbers among it.
SCALARS = (
    st.none()
    | st.booleans()
    | st.integers(-(2**63), 2**64 - 1)
    | st.floats()
    | st.text(max_size=8)
    | st.binary(max_size=40)
)
TREES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=8) | st.dictionaries(st.text(max_size=4), inner, max_size=4),
    max_leaves=12,
)
