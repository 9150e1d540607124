"""Bodies are read strictly, within bounds, and a refusal says where."""

import gzip
import json
import tracemalloc

import pytest
from werkzeug.exceptions import UnsupportedMediaType

from registry.api.strict_json import (
    MAX_BODY_BYTES,
    MAX_DRAINED_BYTES,
    MAX_SAMPLES,
    MAX_UNPACKED_BYTES,
    StrictRequest,
    parsed,
    unpacked,
)
from registry.errors import Invalid, Malformed, TooLarge

RUN = {"run_key": "k", "closure": {"x_mm": 1.5, "turns": -2}, "time_s": [0, 0.5], "note": "Fähre ✓"}


def places(refused):
    return [error.pointer for error in refused.value.errors]


def test_a_plain_object_is_read_as_it_is():
    assert parsed(json.dumps(RUN).encode()) == RUN


def test_a_byte_order_mark_is_tolerated():
    assert parsed(b"\xef\xbb\xbf" + json.dumps(RUN).encode()) == RUN


@pytest.mark.parametrize("body", [b'{"note": "\xe4"}', b"\xff\xfe{\x00}\x00", b'{"note": "\xed\xa0\x80"}'])
def test_what_is_not_utf_8_is_malformed(body):
    with pytest.raises(Malformed, match="UTF-8"):
        parsed(body)


@pytest.mark.parametrize("body", [b"", b"  \n", b"\xef\xbb\xbf"])
def test_an_empty_body_is_malformed(body):
    with pytest.raises(Malformed, match="empty"):
        parsed(body)


@pytest.mark.parametrize("body", [b"{'a': 1}", b"{", b'{"a": 1} {"b": 2}', b'{"a": 01}', b'{"a": 1,}', b"hello"])
def test_what_is_not_json_is_malformed_and_says_the_line(body):
    with pytest.raises(Malformed, match=r"line \d+, column \d+"):
        parsed(body)


@pytest.mark.parametrize("body", [b"[]", b"1", b'"text"', b"null", b"true"])
def test_json_that_is_no_object_is_invalid(body):
    with pytest.raises(Invalid, match="JSON object"):
        parsed(body)


def test_a_name_given_twice_is_refused_with_its_pointer():
    with pytest.raises(Malformed) as refused:
        parsed(b'{"run_key": "a", "closure": {"x_mm": 1, "x_mm": 2}}')
    assert places(refused) == ["/closure/x_mm"]


def test_a_name_given_twice_is_refused_even_with_the_same_value():
    with pytest.raises(Malformed) as refused:
        parsed(b'{"a/b": 1, "a/b": 1}')
    assert places(refused) == ["/a~1b"]


@pytest.mark.parametrize("word", [b"NaN", b"Infinity", b"-Infinity"])
def test_numbers_that_are_no_numbers_are_refused_with_their_pointer(word):
    with pytest.raises(Malformed) as refused:
        parsed(b'{"time_s": [0, 1, ' + word + b"]}")
    assert places(refused) == ["/time_s/2"]


def test_an_integer_of_thousands_of_digits_is_refused_with_its_pointer():
    with pytest.raises(Malformed) as refused:
        parsed(b'{"left_counts": [1, -' + b"9" * 5000 + b"]}")
    assert places(refused) == ["/left_counts/1"]


@pytest.mark.parametrize("opening", [b"[", b'{"a":'])
def test_deep_nesting_is_refused(opening):
    with pytest.raises(Malformed, match="nested"):
        parsed(opening * 200_000)


def test_more_values_than_the_longest_run_has_are_too_large_before_they_are_read():
    body = b'{"time_s": [' + b"0," * (3 * MAX_SAMPLES + 20_000) + b"0]}"
    tracemalloc.start()
    try:
        with pytest.raises(TooLarge, match="2,000,000 samples"):
            parsed(body)
        assert tracemalloc.get_traced_memory()[1] < 3 * len(body)
    finally:
        tracemalloc.stop()


def test_gzip_is_unpacked_in_one_member_or_several():
    packed = gzip.compress(b'{"a": ') + gzip.compress(b"1}")
    assert unpacked(packed, "gzip") == b'{"a": 1}'
    assert unpacked(packed, "GZIP ") == b'{"a": 1}'


@pytest.mark.parametrize(
    ("body", "says"),
    [
        (b"hello", "not gzip"),
        (b'{"a": 1}', "not gzip"),
        (gzip.compress(b'{"a": 1}')[:-5], "cut short"),
        (gzip.compress(b'{"a": 1}')[:5], "cut short"),
        (gzip.compress(b'{"a": 1}') + b"rest", "not gzip"),
        (gzip.compress(b"a" * 5000)[:-8] + bytes(8), "not gzip"),
        (b"", "empty"),
    ],
)
def test_wrong_gzip_is_malformed(body, says):
    with pytest.raises(Malformed, match=says):
        unpacked(body, "gzip")


def test_gzip_without_its_header_is_named():
    with pytest.raises(Malformed, match="Content-Encoding: gzip is missing"):
        unpacked(gzip.compress(b"{}"), "")


def test_another_encoding_is_not_read():
    with pytest.raises(UnsupportedMediaType):
        unpacked(b"{}", "br")


def test_a_body_that_unpacks_without_end_is_too_large_and_memory_stays_bounded():
    bomb = gzip.compress(bytes(MAX_UNPACKED_BYTES + 44_000_000), compresslevel=9)
    assert len(bomb) < 400_000
    tracemalloc.start()
    try:
        with pytest.raises(TooLarge, match="256 MB"):
            unpacked(bomb, "gzip")
        assert tracemalloc.get_traced_memory()[1] < 1.5 * MAX_UNPACKED_BYTES
    finally:
        tracemalloc.stop()


class Pouring:
    """A body as the server hands it on: so many bytes, read piece by piece."""

    def __init__(self, size: int) -> None:
        self.left, self.taken = size, 0

    def read(self, size: int) -> bytes:
        size = min(size, self.left)
        self.left -= size
        self.taken += size
        return bytes(size)


@pytest.mark.parametrize(
    ("length", "pours", "taken"),
    [
        (17_000_000, 10**9, 17_000_000),
        (10**9, 10**9, MAX_DRAINED_BYTES),
        (None, 10**9, MAX_DRAINED_BYTES),
        (None, 1_000_000, 1_000_000),
        (MAX_BODY_BYTES, 10**9, 0),
    ],
)
def test_a_body_that_is_too_long_is_drained_up_to_its_length_or_a_bound(length, pours, taken):
    stream = Pouring(pours)
    environ = {"wsgi.input": stream, "REQUEST_METHOD": "POST"}
    StrictRequest(environ | ({} if length is None else {"CONTENT_LENGTH": str(length)})).drain()
    assert stream.taken == taken
