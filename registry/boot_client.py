r"""Fetch a vehicle's odometry parameters at boot. One file, standard library only, Python 3.8 or later.

Copy it to the vehicle and run it in the start script::

    python3 boot_client.py --server https://registry.example:8460 --vehicle AGV-07 \
        --key-file /etc/rollbook/key --state /var/lib/rollbook --out /run/parameters

Prints the parameters as ``NAME=VALUE`` lines, byte for byte as the registry tagged them (or puts them into ``--out``),
and one clear sentence on stderr. It ends within ``--timeout`` seconds (default 10) whatever the network does.

====  ======================================================================================================
exit  means
====  ======================================================================================================
0     fresh from the registry, condition good
10    fresh, but questioned: the sentence gives the reasons
11    fresh, but provisional: good enough for calibration runs only
20    not confirmed by the registry now: the kept copy, or a carried file; the sentence says how old, and its condition
30    the registry's word is that nothing is in force (or that what is kept here was withdrawn): stand still
40    refused: nothing is loaded, for the reason in the sentence. Wrong usage ends here too: stand still
====  ======================================================================================================

On 30 and 40 nothing is printed, and an ``--out`` file left by an earlier boot is removed, so that nothing stale is
loaded. Nothing kept and no network is 40: 30 is only ever the registry's own word.

**Checked** are the form of the lines, the vehicle id, the digest (recomputed from the bytes), the tag (HMAC under this
vehicle's key, over digest and vehicle id), that the numbers are finite and positive, and the limits of ``--limits``, a
JSON file such as ``{"LEFT_MM_PER_TICK": {"min": 0.3, "max": 0.4}, "WIDTH_MM": {"min": 500}}``. The tag covers
everything above the line ``CONDITION=``, not the condition and its reasons.

**Not reached** (no route, no name, time-out, cut off, TLS that cannot be trusted, or the answers 408, 429 and 5xx): the
newer of the kept copy and the ``--carried`` file (made by ``rollbook parameters``, or the page's download) is loaded.
Newer is by calibration number, which only rises with what comes into force.

**Answered, but not to be trusted** (edited, for another vehicle, a redirection, beyond the limits): the kept copy does
not cover it up. Exit 40, since a person must see it. So too when the registry refuses the key (401, 403): a vehicle may
have several valid keys while one is exchanged, so a refused one was taken back on purpose or set up wrongly, and a
vehicle shut out like this would never again hear of a withdrawal. The kept copy stays on disk, untouched, and is
confirmed or replaced at the next good answer.

**Withdrawn** numbers told by the registry are remembered, and so is its word that nothing is in force: neither a later
network failure nor an old carried file brings them back, and not even a fresh answer does (a withdrawn number never
returns: reinstating makes a new one).

**Reported** is the boot after the parameters are out. Reports that cannot be sent are kept (the newest 100) and sent
at a later boot, each at least once.

The state folder holds ``state.json`` and ``boots.json``, each replaced atomically; one folder a vehicle, one client at
a time. A folder that cannot be written never stops a fresh answer from being loaded; the sentence says so.
Redirections are not followed and proxies named in the environment are not used. Over plain http the key travels
readably: use https outside a closed network.

Importable as well: `load` gives an `Outcome`, `report` sends the boot.
"""

from __future__ import annotations

import argparse
import email.utils
import hashlib
import hmac
import http.client
import json
import math
import os
import re
import socket
import ssl
import sys
import threading
import time
from dataclasses import asdict, dataclass, field, replace
from typing import Any, Callable, NoReturn, Sequence
from urllib.parse import urlsplit

SOFTWARE = "rollbook boot client 1"
FRESH, QUESTIONED, PROVISIONAL, KEPT, NOTHING, REFUSED = 0, 10, 11, 20, 30, 40
BODY_LIMIT_BYTES = 65_536
QUEUE_LIMIT = 100
CLOCK_TRUST_S = 300.0
CONDITIONS = {"good": FRESH, "questioned": QUESTIONED, "provisional": PROVISIONAL}
POSITIVE = ("LEFT_MM_PER_TICK", "RIGHT_MM_PER_TICK", "WIDTH_MM")
UNCERTAINTIES = ("U_LEFT_MM_PER_TICK", "U_RIGHT_MM_PER_TICK", "U_WIDTH_MM")
HEAD = ("VEHICLE_ID", "CALIBRATION_NUMBER", "IN_FORCE_FROM") + POSITIVE + UNCERTAINTIES
TAIL = ("CONDITION", "REASONS", "DIGEST", "TAG")


class RefusedError(Exception):
    """Something is there, but it may not be loaded."""


class NotReachedError(Exception):
    """The registry was not reached, or is too ill to answer."""


@dataclass(frozen=True)
class Options:
    """What to fetch, from where, and where to keep it. ``server`` may be None when ``carried`` is given."""

    vehicle_id: str
    key_file: str
    state: str
    server: str | None = None
    timeout_s: float = 10.0
    limits: str | None = None
    carried: str | None = None
    ca_file: str | None = None
    software: str = SOFTWARE


@dataclass(frozen=True)
class Sheet:
    """Parameters that passed every check: the bytes as tagged, and the fields read from them."""

    raw: bytes
    fields: dict[str, str]

    @property
    def number(self) -> int:
        """The calibration number; rises with what comes into force."""
        return int(self.fields["CALIBRATION_NUMBER"])

    @property
    def condition(self) -> str:
        """``good``, ``questioned`` or ``provisional``."""
        return self.fields["CONDITION"]

    def describe(self) -> str:
        """Number, dates and condition in words."""
        text = "calibration {} (in force from {})".format(self.number, self.fields["IN_FORCE_FROM"])
        if self.condition == "good":
            return text
        reasons = self.fields["REASONS"]
        return "{}, which is {}{}".format(text, self.condition, ": " + reasons if reasons else "")


@dataclass(frozen=True)
class State:
    """What outlives a boot. Times are seconds since 1970.

    ``confirmed_at`` is when the registry last vouched for ``lines``, ``carried_at`` when they were carried in instead,
    and ``registry_at`` when the registry last said anything. ``problem`` says why the file on disk could not be used.
    """

    vehicle_id: str
    lines: str | None = None
    etag: str | None = None
    confirmed_at: float | None = None
    carried_at: float | None = None
    registry_at: float = 0.0
    withdrawn: tuple[int, ...] = ()
    nothing_in_force: bool = False
    problem: str | None = None


@dataclass(frozen=True)
class Outcome:
    """The end of one boot: exit code, one sentence, the parameters (None on 30 and 40) and where they came from."""

    exit_code: int
    sentence: str
    sheet: Sheet | None = None
    source: str | None = None
    age_s: float | None = None
    booted_at: float | None = None
    reached: bool = False
    deadline: float = 0.0
    key: str = field(default="", repr=False)


@dataclass(frozen=True)
class Answer:
    """An HTTP answer, read whole."""

    status: int
    headers: dict[str, str] = field(default_factory=dict)
    body: bytes = b""

    def content_type(self) -> str:
        """The media type in lower case, without its parameters."""
        return self.headers.get("content-type", "").split(";")[0].strip().lower()


# Checks -------------------------------------------------------------------------------------------------------------


def read_sheet(raw: bytes, vehicle_id: str, key: str, limits: dict[str, tuple[float, float]]) -> Sheet:
    """Check parameters in their line form.

    Parameters
    ----------
    raw : bytes
        The lines exactly as received.
    vehicle_id, key : str
        Whose parameters they must be, and the API key that their tag must be under.
    limits : dict
        Field name to (least, greatest) value.

    Raises
    ------
    RefusedError
        With one clause that says what is wrong.
    """
    fields = _split_lines(raw)
    if fields["VEHICLE_ID"] != vehicle_id:
        raise RefusedError("it is for vehicle {}, not {}".format(_short(fields["VEHICLE_ID"]), vehicle_id))
    digest = hashlib.sha256(raw[: raw.index(b"\nCONDITION=") + 1]).hexdigest()
    if not hmac.compare_digest(digest.encode(), fields["DIGEST"].encode()):
        raise RefusedError("its digest does not match its lines, so it was cut or edited")
    tag = hmac.new(hashlib.sha256(key.encode()).digest(), (digest + vehicle_id).encode(), hashlib.sha256).hexdigest()
    if not hmac.compare_digest(tag.encode(), fields["TAG"].encode()):
        raise RefusedError("its tag is not under this vehicle's key")
    _check_values(fields)
    for name, (least, greatest) in limits.items():
        if name not in fields:
            raise RefusedError("the limits name {}, which the parameters do not have".format(_short(name)))
        if not least <= _number(name, fields[name]) <= greatest:
            raise RefusedError(
                "{}={} is not between the limits {:g} and {:g}".format(name, fields[name], least, greatest)
            )
    return Sheet(raw, fields)


def _split_lines(raw: bytes) -> dict[str, str]:
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError:
        raise RefusedError("it is not UTF-8 text") from None
    if not text.endswith("\n") or any(ord(c) < 32 and c != "\n" for c in text):
        raise RefusedError("it is not parameters as lines, each ended by a line feed, or it was cut")
    names: list[str] = []
    fields: dict[str, str] = {}
    for line in text[:-1].split("\n"):
        name, equals, value = line.partition("=")
        if not equals or name in fields:
            raise RefusedError("the line {!r} is not NAME=VALUE, or comes twice".format(_short(line)))
        names.append(name)
        fields[name] = value
    counting = names[len(HEAD) : -len(TAIL)]
    in_order = tuple(names[: len(HEAD)]) == HEAD and tuple(names[-len(TAIL) :]) == TAIL
    if not in_order or len(names) < len(HEAD) + len(TAIL) or any(not n.startswith("COUNTING_") for n in counting):
        raise RefusedError("its lines are not those of a parameters sheet, in their order")
    return fields


def _check_values(fields: dict[str, str]) -> None:
    if not re.fullmatch(r"[1-9][0-9]{0,9}", fields["CALIBRATION_NUMBER"]):
        raise RefusedError("CALIBRATION_NUMBER={} is not a number from 1".format(_short(fields["CALIBRATION_NUMBER"])))
    for name in POSITIVE:
        if _number(name, fields[name]) <= 0:
            raise RefusedError("{}={} is not above 0".format(name, fields[name]))
    for name in UNCERTAINTIES:
        if fields[name] and _number(name, fields[name]) < 0:
            raise RefusedError("{}={} is below 0".format(name, fields[name]))
    if fields["CONDITION"] not in CONDITIONS:
        known = ", ".join(CONDITIONS)
        raise RefusedError("its condition {!r} is none of {}".format(_short(fields["CONDITION"]), known))


def _number(name: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise RefusedError("{}={} is not a finite number".format(_short(name), _short(text)))
    return value


def _short(text: str) -> str:
    printable = "".join(c if c.isprintable() else "?" for c in text[:61])
    return printable if len(text) <= 60 else printable[:60] + "..."


# What the person on the vehicle set up --------------------------------------------------------------------------------


def _read_file(path: str, what: str, limit_bytes: int = BODY_LIMIT_BYTES) -> bytes:
    try:
        with open(path, "rb") as file:
            content = file.read(limit_bytes + 1)
    except OSError as error:
        raise RefusedError("the {} {} cannot be read ({})".format(what, path, error.strerror)) from None
    if len(content) > limit_bytes:
        raise RefusedError("the {} {} is longer than {} bytes".format(what, path, limit_bytes))
    return content


def _read_key(path: str) -> str:
    key = _read_file(path, "key file").strip()
    if not re.fullmatch(rb"[!-~]{1,4096}", key):
        raise RefusedError("the key file {} does not hold one key as printable text on one line".format(path))
    return key.decode("ascii")


def _read_limits(path: str | None) -> dict[str, tuple[float, float]]:
    if path is None:
        return {}
    limits = {}
    try:
        stated = json.loads(_read_file(path, "limits file").decode("utf-8-sig"))
        for name, bounds in stated.items():
            unknown = set(bounds) - {"min", "max"}
            pair = (float(bounds.get("min", -math.inf)), float(bounds.get("max", math.inf)))
            if unknown or not bounds or not pair[0] <= pair[1]:
                raise ValueError
            limits[name.upper()] = pair
    except (ValueError, TypeError, AttributeError, RecursionError):
        form = '{"WIDTH_MM": {"min": 500, "max": 700}}'
        raise RefusedError("the limits file {} is not JSON of the form {}".format(path, form)) from None
    return limits


# Disk ---------------------------------------------------------------------------------------------------------------


def write_atomically(path: str, content: bytes) -> None:
    """Replace a file so that a power cut leaves the old content or the new, never a part.

    Raises
    ------
    OSError
        When the folder cannot be made or written.
    """
    folder = os.path.dirname(os.path.abspath(path))
    os.makedirs(folder, exist_ok=True)
    fresh = os.path.join(folder, "." + os.path.basename(path) + ".new")
    with open(fresh, "wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())
    os.replace(fresh, path)
    if hasattr(os, "O_DIRECTORY"):
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _sealed(content: dict[str, Any]) -> bytes:
    text = json.dumps(content, sort_keys=True)
    return json.dumps({"content": text, "sha256": hashlib.sha256(text.encode()).hexdigest()}).encode() + b"\n"


def _unsealed(path: str, vehicle_id: str) -> dict[str, Any] | None:
    """The content of a state file, None when there is none; RefusedError when it is damaged or another vehicle's."""
    if not os.path.lexists(path):
        return None
    try:
        outer = json.loads(_read_file(path, "state file", 16 * BODY_LIMIT_BYTES))
        if hashlib.sha256(outer["content"].encode()).hexdigest() != outer["sha256"]:
            raise ValueError
        content: dict[str, Any] = json.loads(outer["content"])
        owner = content["vehicle_id"]
    except (ValueError, TypeError, KeyError, AttributeError, RecursionError):
        raise RefusedError("the state file {} is damaged".format(path)) from None
    if owner != vehicle_id:
        raise RefusedError("the state file {} belongs to vehicle {}".format(path, _short(str(owner))))
    return content


def _state_path(options: Options) -> str:
    return os.path.join(options.state, "state.json")


def _load_state(options: Options) -> State:
    try:
        content = _unsealed(_state_path(options), options.vehicle_id)
        if content is None:
            return State(options.vehicle_id)
        return replace(State(**content), withdrawn=tuple(content["withdrawn"]))
    except RefusedError as error:
        return State(options.vehicle_id, problem=str(error))
    except (TypeError, KeyError):
        return State(options.vehicle_id, problem="the state file {} is of another version".format(_state_path(options)))


def _save_state(options: Options, state: State) -> str:
    """Keep the state; answers an empty text, or what to add to the sentence when the disk refuses."""
    content = asdict(state)
    del content["problem"]
    try:
        write_atomically(_state_path(options), _sealed(content))
    except OSError as error:
        return "; this could not be kept in {} ({}), so a start without network will not know it".format(
            options.state, error.strerror
        )
    return ""


# Network ------------------------------------------------------------------------------------------------------------


def _ask(options: Options, deadline: float, request: Callable[[Any], None]) -> Answer:
    """One HTTP exchange that is over by ``deadline`` (monotonic seconds), names and trickling servers included.

    The exchange runs in a thread of its own: looking up a name cannot be interrupted, and a time-out of the socket
    starts anew with each byte. When time is up the connection is shut, which ends the thread.
    """
    connection = _connection(options, max(deadline - time.monotonic(), 0.05))
    box: list[Answer | BaseException] = []
    sockets: list[socket.socket] = []

    def exchange() -> None:
        try:
            connection.connect()
            sockets.append(connection.sock)  # The connection forgets its socket when the server says it will close.
            request(connection)
            response = connection.getresponse()
            headers = {name.lower(): value for name, value in response.getheaders()}
            body = response.read(BODY_LIMIT_BYTES + 1)
            if response.length and len(body) <= BODY_LIMIT_BYTES:
                raise http.client.IncompleteRead(body, response.length)
            box.append(Answer(response.status, headers, body))
        except BaseException as error:  # noqa: BLE001 - handed to the caller below, which raises it again
            box.append(error)

    thread = threading.Thread(target=exchange, daemon=True)
    thread.start()
    thread.join(max(deadline - time.monotonic(), 0.05))
    result = box[0] if box else None
    for sock in sockets:
        _shut(sock)
    if result is None or isinstance(result, TimeoutError):
        raise NotReachedError("the registry did not answer within {:g} s".format(options.timeout_s))
    if isinstance(result, http.client.IncompleteRead):
        raise NotReachedError("the registry's answer was cut off")
    if isinstance(result, (OSError, http.client.HTTPException)):
        why = getattr(result, "strerror", None) or str(result) or type(result).__name__
        raise NotReachedError("the registry was not reached ({})".format(_short(why)))
    if isinstance(result, BaseException):
        raise result
    if result.status in (408, 429) or result.status >= 500:
        raise NotReachedError("the registry cannot answer now (status {})".format(result.status))
    return result


def _connection(options: Options, timeout_s: float) -> http.client.HTTPConnection:
    try:
        parts = urlsplit(options.server or "")
        host, port = parts.hostname, parts.port
    except ValueError:
        raise RefusedError("the server address {} cannot be read".format(_short(str(options.server)))) from None
    if parts.scheme not in ("http", "https") or not host or parts.username or parts.query or parts.fragment:
        raise RefusedError(
            "the server address {} is not of the form https://host:port".format(_short(str(options.server)))
        )
    if parts.scheme == "http":
        return http.client.HTTPConnection(host, port, timeout=timeout_s)
    try:
        context = ssl.create_default_context(cafile=options.ca_file)
    except OSError as error:
        raise RefusedError("the file of certificates {} cannot be used ({})".format(options.ca_file, error)) from None
    return http.client.HTTPSConnection(host, port, timeout=timeout_s, context=context)


def _shut(sock: socket.socket) -> None:
    """End the exchange even when its thread sits in a read: closing alone would leave it waiting."""
    try:
        sock.shutdown(socket.SHUT_RDWR)
    except OSError:
        sock.close()  # The other end had gone already.
    else:
        sock.close()


def _path(options: Options, what: str) -> str:
    prefix = urlsplit(options.server or "").path.rstrip("/")
    return "{}/api/v1/vehicles/{}/{}".format(prefix, options.vehicle_id, what)


def _headers(key: str, extra: dict[str, str]) -> dict[str, str]:
    common = {"Authorization": "Bearer " + key, "Accept-Encoding": "identity", "User-Agent": SOFTWARE}
    return dict(common, Connection="close", **extra)


# The boot -----------------------------------------------------------------------------------------------------------


def load(options: Options) -> Outcome:
    """Decide what this vehicle may load, and keep it.

    Parameters
    ----------
    options : Options
        What to fetch, from where, where to keep it.

    Returns
    -------
    Outcome
        Never raises for what a network, a server, a disk or a file can do: every such end has its exit code.
    """
    deadline = time.monotonic() + options.timeout_s
    key = ""
    try:
        _check_options(options)
        key = _read_key(options.key_file)
        boot = _Boot(options, key, _read_limits(options.limits), _load_state(options), deadline)
        outcome = boot.run()
    except RefusedError as error:
        outcome = Outcome(REFUSED, "Nothing is loaded: {}.".format(error))
    except Exception as error:  # noqa: BLE001 - unforeseen faults must end as 40, or a start script drives on
        outcome = Outcome(REFUSED, "Nothing is loaded: unforeseen {}: {}.".format(type(error).__name__, error))
    return replace(outcome, deadline=deadline, key=key)


def _check_options(options: Options) -> None:
    if not re.fullmatch(r"[A-Za-z0-9._-]{1,64}", options.vehicle_id):
        given = _short(options.vehicle_id)
        raise RefusedError("the vehicle id {!r} is not 1 to 64 letters, digits, '.', '_', '-'".format(given))
    if not 0 < options.timeout_s <= 600:
        raise RefusedError("the time-out of {:g} s is not above 0 and up to 600".format(options.timeout_s))
    if options.server is None and options.carried is None:
        raise RefusedError("neither a server nor a carried file was named")


class _Boot:
    """One boot under way."""

    def __init__(
        self, options: Options, key: str, limits: dict[str, tuple[float, float]], state: State, deadline: float
    ) -> None:
        self.options, self.key, self.limits, self.state, self.deadline = options, key, limits, state, deadline
        self.kept_problem = state.problem
        self.kept_withdrawn = False
        self.kept = self._check_kept()

    def run(self) -> Outcome:
        if self.options.server is None:
            return self._without_registry("no server was named")
        try:
            answer = _ask(self.options, self.deadline, self._request)
        except NotReachedError as error:
            return self._without_registry(str(error))
        now = _registry_time(answer)
        if answer.status == 200:
            return self._fresh(self._accept(answer), answer.headers.get("etag"), now)
        if answer.status == 304:
            if self.kept is None or self.state.etag is None:
                raise RefusedError("the registry answered that nothing changed although nothing is kept here")
            return self._fresh(self.kept, self.state.etag, now)
        return self._told_otherwise(answer, now)

    def _request(self, connection: http.client.HTTPConnection) -> None:
        extra = {"Accept": "text/plain", "Cache-Control": "no-cache"}
        if self.kept is not None and self.state.etag:
            extra["If-None-Match"] = self.state.etag
        connection.request("GET", _path(self.options, "parameters"), headers=_headers(self.key, extra))

    def _check_kept(self) -> Sheet | None:
        if self.state.lines is None:
            return None
        try:
            sheet = read_sheet(self.state.lines.encode(), self.options.vehicle_id, self.key, self.limits)
        except RefusedError as error:
            self.kept_problem = "the kept copy may not be used, since {}".format(error)
            return None
        self.kept_withdrawn = sheet.number in self.state.withdrawn
        return None if self.kept_withdrawn else sheet

    def _accept(self, answer: Answer) -> Sheet:
        if len(answer.body) > BODY_LIMIT_BYTES:
            raise RefusedError("the registry's answer is longer than {} bytes".format(BODY_LIMIT_BYTES))
        encoding = answer.headers.get("content-encoding", "identity").lower()
        if answer.content_type() != "text/plain" or encoding != "identity":
            kind = _short(answer.content_type())
            raise RefusedError("the answer is {!r} and not text/plain, so it is not the registry's".format(kind))
        try:
            sheet = read_sheet(answer.body, self.options.vehicle_id, self.key, self.limits)
        except RefusedError as error:
            raise RefusedError("the registry's answer is refused, since {}".format(error)) from None
        if sheet.number in self.state.withdrawn:
            raise RefusedError(
                "the answer names calibration {}, which was withdrawn (was the registry set back to a backup, or is "
                "a stale proxy in between?)".format(sheet.number)
            )
        return sheet

    def _fresh(self, sheet: Sheet, etag: str | None, now: float) -> Outcome:
        tidy = etag if etag and re.fullmatch(r"[ -~]{1,200}", etag) else None
        extra = ""
        if self.kept is not None and sheet.number < self.kept.number:
            before = ", although the later calibration {} was loaded before (was the registry set back to a backup?)"
            extra = before.format(self.kept.number)
        state = State(
            self.options.vehicle_id, sheet.raw.decode(), tidy, now, registry_at=now, withdrawn=self.state.withdrawn
        )
        extra += _save_state(self.options, state)
        sentence = "Fresh from the registry: {}{}.".format(sheet.describe(), extra)
        return Outcome(CONDITIONS[sheet.condition], sentence, sheet, "fetched", 0.0, now, True)

    def _told_otherwise(self, answer: Answer, now: float) -> Outcome:
        problem = _problem(answer)
        if answer.status == 404 and str(problem.get("type", "")).endswith("/problems/nothing-in-force"):
            return self._nothing_in_force(problem, now)
        if answer.status in (401, 403):
            raise RefusedError(
                "the registry refuses this vehicle's key (status {}); give it a new one, made by "
                "'rollbook key issue --vehicle {}'".format(answer.status, self.options.vehicle_id)
            )
        if 300 <= answer.status < 400:
            where = _short(answer.headers.get("location", "elsewhere"))
            raise RefusedError("the server redirects to {}, which is not followed; name its own address".format(where))
        detail = problem.get("detail") or problem.get("title") or "no reason was given"
        raise RefusedError("the registry answered with status {} ({})".format(answer.status, _short(str(detail))))

    def _nothing_in_force(self, problem: dict[str, Any], now: float) -> Outcome:
        told = problem.get("withdrawn_numbers")
        numbers = [n for n in told if type(n) is int and n > 0] if isinstance(told, list) else []
        withdrawn = tuple(sorted(set(numbers) | set(self.state.withdrawn)))
        state = replace(self.state, withdrawn=withdrawn, nothing_in_force=True, registry_at=now, problem=None)
        extra = _save_state(self.options, state)
        named = " (withdrawn: {})".format(", ".join(map(str, withdrawn[-20:]))) if withdrawn else ""
        sentence = "Nothing is loaded: the registry has nothing in force for {}{}{}.".format(
            self.options.vehicle_id, named, extra
        )
        return Outcome(NOTHING, sentence, reached=True)

    def _without_registry(self, why: str) -> Outcome:
        carried, carried_problem = self._check_carried()
        if carried is not None and self._carried_is_better(carried):
            return self._use_carried(carried, why)
        problems = "".join(", and " + text for text in (self.kept_problem, carried_problem) if text)
        if self.state.nothing_in_force or self.kept_withdrawn:
            word = "the kept copy was withdrawn"
            if self.state.nothing_in_force:
                word = "the registry's last word was that nothing is in force"
            return Outcome(NOTHING, "Nothing is loaded: {}, and {}{}.".format(why, word, problems))
        if self.kept is None:
            nothing = "" if self.kept_problem else ", and no copy is kept here"
            raise RefusedError(why + nothing + problems)
        return self._use_kept(self.kept, why, carried_problem)

    def _check_carried(self) -> tuple[Sheet | None, str | None]:
        path = self.options.carried
        if path is None:
            return None, None
        if self.state.problem is not None:
            remedy = "remove the state file to start anew"
            return None, "the carried file is not used while it is unknown what was withdrawn ({})".format(remedy)
        try:
            sheet = read_sheet(_read_file(path, "carried file"), self.options.vehicle_id, self.key, self.limits)
        except RefusedError as error:
            return None, "the carried file {} is refused, since {}".format(path, error)
        if sheet.number in self.state.withdrawn:
            return None, "the carried file holds calibration {}, which was withdrawn".format(sheet.number)
        return sheet, None

    def _carried_is_better(self, carried: Sheet) -> bool:
        """By number, which only rises with what comes into force; at the same number the less good condition counts."""
        if self.state.nothing_in_force:
            known = self.state.withdrawn + ((self.kept.number,) if self.kept else ())
            return all(carried.number > number for number in known)
        if self.kept is None or carried.number > self.kept.number:
            return True
        return carried.number == self.kept.number and carried.condition != "good" and self.kept.condition == "good"

    def _use_carried(self, sheet: Sheet, why: str) -> Outcome:
        state = replace(self.state, lines=sheet.raw.decode(), etag=None, confirmed_at=None, carried_at=time.time())
        state = replace(state, nothing_in_force=False)
        extra = _save_state(self.options, state)
        loaded = "Loaded from the carried file: {}; how old it is is not known, as {}{}."
        sentence = loaded.format(sheet.describe(), why, extra)
        return Outcome(KEPT, sentence, sheet, "carried", None, self._offline_time())

    def _use_kept(self, sheet: Sheet, why: str, carried_problem: str | None) -> Outcome:
        told, since = "last confirmed by the registry", self.state.confirmed_at
        if since is None:
            told, since = "carried in", self.state.carried_at
        age_s = time.time() - (since or 0.0)
        age = "{} {} ago".format(told, _age_in_words(age_s))
        if age_s < 0:
            age = "its age cannot be told, as this vehicle's clock stands before the time it was kept"
        note = "; " + carried_problem if carried_problem else ""
        sentence = "Loaded from the kept copy: {}; {}, as {}{}.".format(sheet.describe(), age, why, note)
        return Outcome(KEPT, sentence, sheet, "kept", age_s if age_s >= 0 else None, self._offline_time())

    def _offline_time(self) -> float | None:
        """Now by the vehicle's clock, or None when that is plainly wrong: earlier than the registry's last answer."""
        now = time.time()
        return None if now < self.state.registry_at - CLOCK_TRUST_S else now


def _problem(answer: Answer) -> dict[str, Any]:
    if answer.content_type() != "application/problem+json":
        return {}
    try:
        problem = json.loads(answer.body.decode("utf-8"))
    except (ValueError, RecursionError):
        return {}
    return problem if isinstance(problem, dict) else {}


def _registry_time(answer: Answer) -> float:
    """Now in seconds since 1970: by the vehicle's clock, unless the registry's differs by more than five minutes."""
    now = time.time()
    try:
        told = email.utils.parsedate_to_datetime(answer.headers.get("date", "")).timestamp()
    except (TypeError, ValueError, IndexError, OverflowError):
        return now
    return told if abs(told - now) > CLOCK_TRUST_S else now


def _age_in_words(seconds: float) -> str:
    if seconds < 120:
        return "{:.0f} s".format(seconds)
    if seconds < 7200:
        return "{:.0f} min".format(seconds / 60)
    if seconds < 172_800:
        return "{:.0f} h".format(seconds / 3600)
    return "{:.0f} days".format(seconds / 86_400)


# The report ---------------------------------------------------------------------------------------------------------


def report(options: Options, outcome: Outcome) -> str:
    """Queue this boot and send what is queued, as far as the time left allows.

    Parameters
    ----------
    options : Options
        As given to `load`.
    outcome : Outcome
        What `load` answered.

    Returns
    -------
    str
        Empty, or a sentence on what could not be queued or sent.
    """
    path = os.path.join(options.state, "boots.json")
    notes: list[str] = []
    try:
        queue = list((_unsealed(path, options.vehicle_id) or {"boots": []})["boots"])
    except (RefusedError, KeyError, TypeError) as error:
        if outcome.sheet is None:
            return ""  # Nothing to add: whatever the file is, leave it as it was found.
        queue = []
        notes.append("Earlier boot reports are lost: {}.".format(error))
    if outcome.sheet is not None:
        if outcome.booted_at is None:
            notes.append("This boot is not reported, as the vehicle's clock is wrong.")
        else:
            queue.append(_statement(options, outcome, outcome.sheet, outcome.booted_at))
    if len(queue) > QUEUE_LIMIT:
        notes.append("{} old boot reports were dropped.".format(len(queue) - QUEUE_LIMIT))
        queue = queue[-QUEUE_LIMIT:]
    _save_queue(options, path, queue, notes)
    if queue and outcome.reached:
        left = _send(options, outcome, queue, notes)
        if len(left) < len(queue):
            _save_queue(options, path, left, notes)
    return " ".join(dict.fromkeys(notes))


def _statement(options: Options, outcome: Outcome, sheet: Sheet, booted_at: float) -> dict[str, Any]:
    return {
        "calibration_number": sheet.number,
        "digest": sheet.fields["DIGEST"],
        "source": outcome.source,
        "booted_at": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(booted_at)),
        "age_s": None if outcome.age_s is None else round(outcome.age_s, 1),
        "software": options.software,
    }


def _save_queue(options: Options, path: str, queue: list[dict[str, Any]], notes: list[str]) -> None:
    if not queue and not os.path.lexists(path):
        return
    try:
        write_atomically(path, _sealed({"vehicle_id": options.vehicle_id, "boots": queue}))
    except OSError as error:
        notes.append("The boot reports could not be kept in {} ({}).".format(options.state, error.strerror))


def _send(options: Options, outcome: Outcome, queue: list[dict[str, Any]], notes: list[str]) -> list[dict[str, Any]]:
    """Send oldest first; answers those still to be sent. What the registry calls wrong is dropped: it stays wrong."""
    for index, statement in enumerate(queue):
        if time.monotonic() >= outcome.deadline:
            return queue[index:]
        body = json.dumps(statement).encode()

        def request(connection: http.client.HTTPConnection, body: bytes = body) -> None:
            extra = {"Content-Type": "application/json"}
            connection.request("POST", _path(options, "boots"), body=body, headers=_headers(outcome.key, extra))

        try:
            answer = _ask(options, outcome.deadline, request)
        except NotReachedError as error:
            notes.append("The boot report waits for the next start: {}.".format(error))
            return queue[index:]
        if answer.status in (401, 403):
            notes.append("The boot report waits: the registry refuses the key (status {}).".format(answer.status))
            return queue[index:]
        if not 200 <= answer.status < 300:
            detail = _short(str(_problem(answer).get("detail", "no reason was given")))
            notes.append("A boot report was refused (status {}: {}) and dropped.".format(answer.status, detail))
    return []


# Command line -------------------------------------------------------------------------------------------------------


class _Parser(argparse.ArgumentParser):
    def error(self, message: str) -> NoReturn:
        """Wrong usage ends as a refusal: a start script that stands still on 30 and 40 then stands still here too."""
        self.exit(REFUSED, "Nothing is loaded: wrong usage, {} (see --help).\n".format(message))


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        description="Fetch a vehicle's odometry parameters at boot.",
        epilog="Exit: 0 fresh, 10 questioned, 11 provisional, 20 kept copy, 30 nothing in force, 40 refused.",
        allow_abbrev=False,
    )
    parser.add_argument("--server", metavar="URL", help="address of the registry, as https://host:port")
    parser.add_argument("--vehicle", metavar="ID", required=True, help="the vehicle's id in the registry")
    parser.add_argument("--key-file", metavar="FILE", required=True, help="file that holds the vehicle's API key")
    parser.add_argument("--state", metavar="DIR", required=True, help="folder for the kept copy and unsent reports")
    parser.add_argument("--timeout", metavar="S", type=float, default=10.0, help="seconds for everything (default 10)")
    parser.add_argument("--limits", metavar="FILE", help="JSON file of least and greatest values a field may have")
    parser.add_argument("--carried", metavar="FILE", help="parameters carried here, for when there is no network")
    parser.add_argument("--out", metavar="FILE", help="put the parameters into FILE instead of printing them")
    parser.add_argument("--ca-file", metavar="FILE", help="certificates to trust for https, instead of the system's")
    parser.add_argument("--software", metavar="TEXT", default=SOFTWARE, help="the vehicle's software, for the report")
    parser.add_argument("--no-report", action="store_true", help="do not report this boot")
    return parser


def _print_whole(content: bytes) -> None:
    """Past Python's own buffer, which would be flushed a second time, and fail a second time, on leaving."""
    while content:
        content = content[os.write(sys.stdout.fileno(), content) :]


def _deliver(outcome: Outcome, out: str | None) -> Outcome:
    """Hand the parameters over. On failure they are not loaded, whatever the registry said."""
    try:
        if outcome.sheet is not None and out is not None:
            write_atomically(out, outcome.sheet.raw)
        elif outcome.sheet is not None:
            _print_whole(outcome.sheet.raw)
        elif out is not None and os.path.isfile(out):
            with open(out, "rb") as file:
                ours = file.read(11) == b"VEHICLE_ID="
            if ours:
                os.remove(out)
    except OSError as error:
        where = "standard output" if out is None else out
        return Outcome(REFUSED, "Nothing is loaded: {} cannot be written ({}).".format(where, error.strerror))
    return outcome


def main(argv: Sequence[str] | None = None) -> int:
    """Run one boot; answers the exit code."""
    given = _parser().parse_args(argv)
    options = Options(
        given.vehicle, given.key_file, given.state, given.server, given.timeout, given.limits, given.carried,
        given.ca_file, given.software,
    )  # fmt: skip
    outcome = _deliver(load(options), given.out)
    print(outcome.sentence, file=sys.stderr)
    if not given.no_report:
        note = report(options, outcome)
        if note:
            print(note, file=sys.stderr)
    return outcome.exit_code


if __name__ == "__main__":
    sys.exit(main())
