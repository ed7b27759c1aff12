"""The event stream's parser, on the rules and examples of the HTML standard (server-sent events, section 9.2)."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from gainwright_client.events import Event, EventParser

STREAM = (
    b": a comment\n\nretry: 1500\n\nid: 1\nevent: sample\ndata: {}\n\nid\ndata: first\ndata:  second\n\n"
    b"event: empty\n\ndata\n\n"
)
EVENTS = [
    Event("sample", "{}", "1"),
    Event("message", "first\n second", ""),
    Event("message", "", ""),
]


def parsed(pieces: list[bytes]) -> list[Event]:
    parser = EventParser()
    return [event for piece in pieces for event in parser.take(piece)]


@pytest.mark.parametrize("end", [b"\n", b"\r\n"])
def test_fields_comments_and_several_data_lines_are_read_by_the_standard(end: bytes) -> None:
    assert parsed([STREAM.replace(b"\n", end)]) == EVENTS


@given(st.sets(st.integers(0, 2 * len(STREAM)), max_size=12), st.sampled_from([b"\n", b"\r\n"]))
def test_pieces_of_any_length_tell_the_same_events(cuts: set[int], end: bytes) -> None:
    text = STREAM.replace(b"\n", end)
    edges = [0, *sorted(c for c in cuts if c < len(text)), len(text)]
    pieces = [text[a:b] for a, b in itertools.pairwise(edges)]
    assert parsed(pieces) == EVENTS


def test_the_retry_time_is_kept_in_seconds_and_nonsense_is_not() -> None:
    parser = EventParser()
    parser.take(b"retry: 1500\nretry: soon\n")
    assert parser.retry_s == 1.5


def test_line_ends_of_other_kinds_belong_to_the_data() -> None:
    text = "a\u2028b\x85c\x0bd"
    assert parsed([f"data: {text}\n\n".encode()]) == [Event("message", text, None)]


def test_an_event_without_its_blank_line_is_not_told() -> None:
    assert parsed([b"data: half\n"]) == []
