"""The buffer against a plain array."""

from __future__ import annotations

import numpy as np
import pytest
from driftwatch.pipeline import buffer
from driftwatch.pipeline.buffer import SampleBuffer
from hypothesis import given
from hypothesis import strategies as st


@given(
    first=st.integers(-50, 1_000),
    steps=st.lists(st.tuples(st.integers(0, 40), st.booleans(), st.floats(0, 1)), min_size=1, max_size=40),
)
def test_it_holds_what_was_appended_and_not_forgotten(first, steps):
    """Small and borrowed pieces, zeros, and forgetting anywhere, in any order."""
    whole = np.zeros(0, np.float32)
    held: SampleBuffer[np.float32] = SampleBuffer(np.float32, first)
    rng = np.random.default_rng(0)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(buffer, "BORROWED", 20)
        for count, zeros, share in steps:
            piece = np.zeros(count, np.float32) if zeros else rng.standard_normal(count).astype(np.float32)
            if zeros:
                held.append_zeros(count)
            else:
                held.append(piece)
            whole = np.concatenate((whole, piece))
            assert held.end == first + len(whole)
            np.testing.assert_array_equal(held.view(held.kept, held.end), whole[held.kept - first :])
            if held.kept <= held.seam <= held.end:
                np.testing.assert_array_equal(held.view(held.seam, held.end), whole[held.seam - first :])
            held.forget(held.kept + int(share * (held.end - held.kept)))


def test_samples_that_are_not_there_are_refused():
    held: SampleBuffer[np.float32] = SampleBuffer(np.float32, 10)
    held.append(np.ones(5, np.float32))
    held.forget(12)
    for first, end in ((11, 13), (12, 16), (14, 13)):
        with pytest.raises(IndexError, match="it holds 12 to 15"):
            held.view(first, end)


def test_a_large_array_is_borrowed_and_a_strided_one_copied():
    held: SampleBuffer[np.float32] = SampleBuffer(np.float32, 0)
    large = np.zeros(buffer.BORROWED, np.float32)
    held.append(large)
    assert np.shares_memory(held.view(0, held.end), large)
    two = np.zeros((buffer.BORROWED, 2), np.float32)
    held.append(two[:, 0])
    assert not np.shares_memory(held.view(buffer.BORROWED, held.end), two)
