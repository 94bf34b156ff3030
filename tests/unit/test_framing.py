"""Framing: any cut of the stream gives the same frames, and memory stays bounded."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.framing import LONGEST_FRAME_BYTES, FrameReader

STREAMS = st.lists(st.sampled_from([b"a", b"12.5", b"\n", b"\r", b"\r\n", b"\xff", b"long line ", b"x" * 20])).map(
    b"".join
)


@given(STREAMS, st.lists(st.integers(min_value=0, max_value=400)))
def test_any_cut_gives_the_same_frames(stream, places):
    whole = FrameReader(longest=24)
    expected = whole.feed(stream)
    reader, frames = FrameReader(longest=24), []
    cuts = sorted({min(place, len(stream)) for place in places} | {0, len(stream)})
    for begin, end in itertools.pairwise(cuts):
        frames += reader.feed(stream[begin:end])
    assert frames == expected
    assert reader.held == whole.held


@given(STREAMS)
def test_frames_are_the_lines_between_end_marks(stream):
    frames = FrameReader(longest=24).feed(stream)
    lines = stream.split(b"\n")[:-1]
    assert len(frames) == len(lines)
    for frame, line in zip(frames, lines, strict=True):
        assert frame == (None if len(line) > 24 else line.removesuffix(b"\r"))


def test_a_line_without_end_does_not_grow_for_ever():
    reader = FrameReader()
    for _ in range(100):
        assert reader.feed(b"x" * 1000) == []
    assert len(reader._held) <= LONGEST_FRAME_BYTES
    assert reader.held
    assert reader.feed(b"\nnext\n") == [None, b"next"]


def test_clear_forgets_a_line_that_has_begun():
    reader = FrameReader()
    reader.feed(b"old")
    reader.clear()
    assert not reader.held
    assert reader.feed(b"new\n") == [b"new"]


def test_an_end_mark_is_one_byte():
    with pytest.raises(ValueError, match="one byte"):
        FrameReader(b"\r\n")
