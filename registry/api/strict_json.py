"""Reading a body: bounded, UTF-8, and JSON without the things that two readers would understand differently.

Duplicate keys, NaN and infinities are not JSON in the sense of RFC 8259 section 4 and I-JSON (RFC 7493), yet common
readers take them. They are refused here, each with the pointer of the place, before anything else looks at the content.
"""

from __future__ import annotations

import json
import re
import zlib
from collections.abc import Callable, Iterator
from typing import Any

from flask import Request
from werkzeug.exceptions import UnsupportedMediaType

from registry.errors import FieldError, Invalid, Malformed, TooLarge

MAX_BODY_BYTES = 16_000_000
MAX_UNPACKED_BYTES = 256_000_000
#: Of a body that is refused for its length, so much is still read and dropped, see `StrictRequest.drain`.
MAX_DRAINED_BYTES = 64_000_000
MAX_SAMPLES = 2_000_000
#: A run of the greatest length has three commas a sample; the rest of a body has room for ten thousand more.
MAX_COMMAS = 3 * MAX_SAMPLES + 10_000
#: The interpreter's own limit for turning digits into an integer.
MAX_DIGITS = 4_300

_UNPACK_STEP_BYTES = 1 << 20
_DRAIN_STEP_BYTES = 1 << 16
_GZIP_MAGIC = b"\x1f\x8b"
_UTF8_MARK = b"\xef\xbb\xbf"


class _Odd:
    """Stands in the parsed tree where something is wrong, so that its pointer can be found afterwards."""

    def __init__(self, detail: str) -> None:
        self.detail = detail


class _Doubled(dict[str, Any]):
    """An object in which a name came twice."""

    name = ""


def unpacked(data: bytes, encoding: str) -> bytes | bytearray:
    """
    Undo the content encoding of a body, within bounds.

    Parameters
    ----------
    data
        The body as received, at most `MAX_BODY_BYTES`.
    encoding
        The ``Content-Encoding`` header: empty, ``identity`` or ``gzip``.

    Returns
    -------
    bytes or bytearray
        At most `MAX_UNPACKED_BYTES`.

    Raises
    ------
    UnsupportedMediaType
        For another encoding.
    Malformed
        When the body is not gzip, is cut short, or carries bytes after its end.
    TooLarge
        When it unpacks to more than the limit.
    """
    name = encoding.strip().lower()
    if name in ("", "identity"):
        if data.startswith(_GZIP_MAGIC):
            raise Malformed("the body is gzip, but the header Content-Encoding: gzip is missing: add it")
        return data
    if name not in ("gzip", "x-gzip"):
        raise UnsupportedMediaType(f"Content-Encoding {encoding!r} is not read here: send gzip or none")
    if not data:
        raise Malformed("the body is empty: send a gzipped JSON object")
    whole = bytearray()
    rest = data
    while rest:
        rest = _unpack_member(rest, whole)
    return whole


def _unpack_member(data: bytes, whole: bytearray) -> bytes:
    """Append one gzip member to ``whole`` and return what follows it."""
    member = zlib.decompressobj(wbits=31)
    try:
        piece = member.decompress(data, _UNPACK_STEP_BYTES)
        while True:
            whole += piece
            if len(whole) > MAX_UNPACKED_BYTES:
                raise TooLarge(f"the body unpacks to more than {MAX_UNPACKED_BYTES // 1_000_000} MB: send shorter runs")
            if member.eof:
                return member.unused_data
            if not member.unconsumed_tail and not piece:
                raise Malformed("the gzip body is cut short: send it again in full")
            piece = member.decompress(member.unconsumed_tail, _UNPACK_STEP_BYTES)
    except zlib.error as error:
        raise Malformed("the body is not gzip as Content-Encoding says: compress it, or drop the header") from error


def parsed(data: bytes | bytearray) -> dict[str, Any]:
    """
    Read one JSON object, strictly.

    Parameters
    ----------
    data
        UTF-8, with or without a byte-order mark.

    Returns
    -------
    dict
        As `json.loads` gives it: integers stay integers; a number such as ``1e999`` is an infinity and is left to the
        field that reads it.

    Raises
    ------
    Malformed
        Not UTF-8, not JSON, nested too deeply, NaN or an infinity by name, a name twice, an integer of thousands of
        digits; the pointer is named where there is one.
    TooLarge
        More values than the longest run has.
    Invalid
        JSON, but not an object.
    """
    text = _decoded(data)
    del data  # a long run is tens of megabytes, and the tree is about to take five times as much
    if text.count(",") > MAX_COMMAS:
        raise TooLarge(f"more than {MAX_SAMPLES:,} samples: split the run")
    odd: list[Any] = []
    tree = _loads(text, odd)
    if odd:
        raise Malformed("the body holds something that JSON does not allow", tuple(_places(tree)))
    if not isinstance(tree, dict):
        raise Invalid("the body must be a JSON object", (FieldError("", "send one JSON object: {…}"),))
    return tree


def _decoded(data: bytes | bytearray) -> str:
    if data.startswith(_UTF8_MARK):
        data = data[len(_UTF8_MARK) :]
    if not data.strip():
        raise Malformed("the body is empty: send a JSON object")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise Malformed(f"the body is not UTF-8 (byte {error.start}): save or send it as UTF-8") from error


def _loads(text: str, odd: list[Any], parse_int: Callable[[str], Any] | None = None) -> Any:
    def named(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        found = dict(pairs)
        if len(found) == len(pairs):
            return found
        names = [name for name, _ in pairs]
        doubled = _Doubled(found)
        doubled.name = next(name for name in names if names.count(name) > 1)
        odd.append(doubled)
        return doubled

    def constant(name: str) -> _Odd:
        odd.append(_Odd(f"{name} is not a JSON number: send a finite number or null"))
        return odd[-1]  # type: ignore[no-any-return]  # the line above put an _Odd there

    try:
        return json.loads(text, object_pairs_hook=named, parse_constant=constant, parse_int=parse_int)
    except json.JSONDecodeError as error:
        raise Malformed(f"the body is not JSON: {error.msg} at line {error.lineno}, column {error.colno}") from error
    except RecursionError as error:
        raise Malformed("the body is nested too deeply: no field here needs more than a few levels") from error
    except ValueError:
        # Only an integer beyond the interpreter's limit comes here: the slow second reading finds its place.
        return _loads(text, odd, parse_int=_bounded_int(odd))


def _bounded_int(odd: list[Any]) -> Callable[[str], Any]:
    def read(digits: str) -> Any:
        if len(digits) < MAX_DIGITS:
            return int(digits)
        odd.append(_Odd(f"an integer of {len(digits.lstrip('-'))} digits: no field here takes one"))
        return odd[-1]

    return read


def _places(tree: Any) -> Iterator[FieldError]:
    """The pointer of each odd thing, at most ten of them."""
    found = 0
    stack: list[tuple[str, Any]] = [("", tree)]
    while stack and found < 10:
        pointer, value = stack.pop()
        if isinstance(value, _Odd):
            found += 1
            yield FieldError(pointer, value.detail)
        elif isinstance(value, dict):
            if isinstance(value, _Doubled):
                found += 1
                yield FieldError(f"{pointer}/{escaped(value.name)}", "this name is given twice: keep one")
            stack.extend((f"{pointer}/{escaped(name)}", inner) for name, inner in reversed(value.items()))
        elif isinstance(value, list):
            stack.extend((f"{pointer}/{index}", inner) for index, inner in reversed(list(enumerate(value))))


def escaped(name: object) -> str:
    """One step of a JSON pointer (RFC 6901)."""
    return re.sub(r"[\ud800-\udfff]", "?", str(name)).replace("~", "~0").replace("/", "~1")


class StrictRequest(Request):
    """A request whose JSON is read strictly, whatever its declared type, and whose refusals are never silenced."""

    _strict_json: dict[str, Any] | None = None

    def get_json(self, force: bool = False, silent: bool = False, cache: bool = True) -> Any:
        """
        Read the body as one JSON object.

        The arguments are the framework's and change nothing: a body that cannot be read is always said to be so.

        Returns
        -------
        dict
            The same object on every call.

        Raises
        ------
        Malformed, TooLarge, Invalid, UnsupportedMediaType
            See `unpacked` and `parsed`.
        """
        if self._strict_json is None:
            data = self.get_data(cache=False)
            if self.content_length is None and len(data) >= MAX_BODY_BYTES:
                # A body that does not say its length is cut at the limit without a word.
                raise TooLarge(
                    f"the body is longer than {MAX_BODY_BYTES // 1_000_000} MB: gzip it, or send shorter runs"
                )
            self._strict_json = parsed(unpacked(data, self.headers.get("Content-Encoding", "")))
        return self._strict_json

    def take_json(self) -> dict[str, Any]:
        """Read the body as `get_json` does, and keep it no longer: a long run is not held while it is worked on."""
        taken: dict[str, Any] = self.get_json()
        self._strict_json = None
        return taken

    def drain(self) -> None:
        """Read what is left of a body that is too long, and drop it, before the refusal is answered.

        Many clients send all of a body before they look for an answer. A server that answers and closes while they
        send breaks their pipe, and they never learn why. A body beyond `MAX_DRAINED_BYTES` is given up on.
        """
        length = self.content_length
        if length is not None and length <= MAX_BODY_BYTES:
            return  # It was read in full, or is left to the server.
        left = MAX_DRAINED_BYTES if length is None else min(length, MAX_DRAINED_BYTES)
        stream = self.environ["wsgi.input"]
        while left > 0:
            piece = stream.read(min(left, _DRAIN_STEP_BYTES))
            if not piece:
                return
            left -= len(piece)
