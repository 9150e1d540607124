"""Signing in and out, and the guard before every page.

Failed tries are slowed down by a sliding window for a name at an address; whoever waits may try again, nobody is locked
out for ever, and a right password is never counted.
"""

from __future__ import annotations

import hashlib
import hmac
from collections.abc import Callable
from functools import cached_property

from flask import Blueprint, Flask, Response, flash, make_response, redirect, render_template, request, session, url_for
from flask_login import LoginManager, current_user, login_user, logout_user
from flask_wtf.csrf import validate_csrf
from limits import RateLimitItem, RateLimitItemPerHour, RateLimitItemPerMinute
from limits.storage import MemoryStorage
from limits.strategies import MovingWindowRateLimiter
from werkzeug.wrappers import Response as BaseResponse
from wtforms.validators import ValidationError

from registry.domain.person import Person
from registry.errors import Malformed
from registry.procedures.people import check_password
from registry.storage import people
from registry.web.current import services
from registry.web.forms import SignInForm

#: Endpoints that need nobody signed in.
OPEN = frozenset({"web.sign_in", "web.static", "web.drawing_script"})

#: Failed tries of one name from one address: five a minute, thirty an hour.
LIMITS: tuple[RateLimitItem, ...] = (RateLimitItemPerMinute(5), RateLimitItemPerHour(30))


class SignedIn:
    """A person in a session. A changed password ends every session that was begun with the one before."""

    is_active = True
    is_authenticated = True
    is_anonymous = False

    def __init__(self, person: Person) -> None:
        self.person = person

    def get_id(self) -> str:
        """What the signed session cookie carries."""
        return f"{self._password_mark()}:{self.person.name}"

    def holds(self, session_id: str) -> bool:
        """Whether a session was begun by this person with this password."""
        return hmac.compare_digest(self.get_id().encode(), session_id.encode())

    def _password_mark(self) -> str:
        return hashlib.sha256(self.person.password_hash.encode()).hexdigest()[:24]


class Tries:
    """Counts failed tries, in this process."""

    @cached_property
    def _window(self) -> MovingWindowRateLimiter:
        # Its storage starts a thread, which making an application must not: it is made with the first try.
        return MovingWindowRateLimiter(MemoryStorage())

    def may(self, name: str) -> bool:
        """Whether another try under this name from this address is due."""
        return all(self._window.test(limit, *self._who(name)) for limit in LIMITS)

    def failed(self, name: str) -> None:
        """Note a try that failed."""
        for limit in LIMITS:
            self._window.hit(limit, *self._who(name))

    @staticmethod
    def _who(name: str) -> tuple[str, str]:
        # A name is whatever was typed: keep its digest, of one length.
        return request.remote_addr or "", hashlib.sha256(name.encode()).hexdigest()


def manage(app: Flask) -> None:
    """Let the application know its people."""
    manager = LoginManager()
    manager.session_protection = None
    manager.user_loader(_signed_in)
    # Its own init_app would also hook every answer, those of the API too, for a remember-me cookie not used here:
    # 45 microseconds an answer, half of an empty view, and a Vary that no machine needs.
    app.login_manager = manager  # type: ignore[attr-defined]  # where Flask-Login looks for it


def _signed_in(session_id: str) -> SignedIn | None:
    _, _, name = session_id.partition(":")
    with services().read() as c:
        person = people.by_name(c, name)
    if person is None:
        return None
    user = SignedIn(person)
    return user if user.holds(session_id) else None


def guard() -> BaseResponse | None:
    """Before every page: somebody is signed in, and whatever is posted comes from our own form.

    Raises
    ------
    Malformed
        The form carries no token of this session.
    """
    if request.method not in ("GET", "HEAD", "OPTIONS"):
        _check_form()
    if request.endpoint in OPEN or current_user.is_authenticated:
        return None
    here = request.full_path.rstrip("?") if request.method == "GET" else None
    return redirect(url_for("web.sign_in", next=None if here in ("/", None) else here), 303)


def _check_form() -> None:
    try:
        validate_csrf(request.form.get("csrf_token"))
    except ValidationError as error:
        raise Malformed(
            "The form is from another session: go back, load the page again and send it once more."
        ) from error


def safe_next(target: str | None) -> str:
    """A path of ours to go on to after signing in; the fleet for anything else."""
    if (
        target is None
        or not target.startswith("/")
        or target.startswith("//")
        or "\\" in target
        or not target.isprintable()
    ):
        return url_for("web.fleet")
    return target


def doors(pages: Blueprint) -> None:
    """Put the sign-in page and the signing out on the blueprint."""
    tries = Tries()
    pages.add_url_rule("/sign-in", "sign_in", _sign_in(tries), methods=["GET", "POST"])
    pages.add_url_rule("/sign-out", "sign_out", _sign_out, methods=["POST"])


def _sign_in(tries: Tries) -> Callable[[], BaseResponse]:
    def sign_in() -> BaseResponse:
        if request.method == "GET":
            return _sign_in_page(SignInForm())
        form = SignInForm(request.form)
        if not form.validate():
            return _sign_in_page(form, 422)
        name = form.name.data or ""
        if not tries.may(name):
            form.problem = "Too many tries in a short time. Wait a minute, then try again."
            response = _sign_in_page(form, 429)
            response.headers["Retry-After"] = "60"
            return response
        person = check_password(services(), name, form.password.data or "")
        if person is None:
            tries.failed(name)
            form.problem = "Name and password do not belong together. Check both; capitals count."
            return _sign_in_page(form, 422)
        session.clear()
        login_user(SignedIn(person))
        return redirect(safe_next(request.args.get("next")), 303)

    return sign_in


def _sign_in_page(form: SignInForm, status: int = 200) -> Response:
    return make_response(render_template("sign_in.html", form=form, sent=form if status != 200 else None), status)


def _sign_out() -> BaseResponse:
    logout_user()
    session.clear()
    flash("You have signed out.")
    return redirect(url_for("web.sign_in"), 303)
