from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

import pytest

from registry.app import create_app
from registry.domain.person import Person
from registry.services import Services
from registry.storage import people
from registry.web.policy import CONTENT_POLICY
from registry.web.sign_in import SignedIn
from tests.conftest import StandingClock, services_in
from tests.web.conftest import Visitor
from tests.web.yard import PASSWORD, Yard

pytestmark = pytest.mark.usefixtures("yard")


def test_the_fleet_leads_to_the_sign_in_page(stranger: Visitor) -> None:
    response = stranger.get("/")
    assert (response.status_code, response.location) == (303, "/sign-in")


def test_another_page_leads_to_the_sign_in_page_and_back(stranger: Visitor) -> None:
    response = stranger.get("/vehicles/tub-7?runs_after=x")
    assert response.location == "/sign-in?next=/vehicles/tub-7?runs_after%3Dx"
    assert stranger.sign_in("Abel", query="?next=/vehicles/tub-7").location == "/vehicles/tub-7"


@pytest.mark.parametrize("elsewhere", ["https://example.org/", "//example.org/", "/\\example.org", "alerts", "/a\nb"])
def test_signing_in_never_leads_to_another_place(stranger: Visitor, elsewhere: str) -> None:
    stranger.token("/sign-in")
    response = stranger.client.post(
        "/sign-in",
        query_string={"next": elsewhere},
        data={"csrf_token": stranger.token("/sign-in"), "name": "Abel", "password": PASSWORD},
    )
    assert (response.status_code, response.location) == (303, "/")


def test_the_fields_are_labelled_name_and_password(stranger: Visitor) -> None:
    page = stranger.text("/sign-in")
    assert '<label for="sign-in-name">Name</label>' in page
    assert '<label for="sign-in-password">Password</label>' in page
    assert '<button type="submit">Sign in</button>' in page


def test_a_wrong_password_is_refused_on_the_page_and_the_name_is_kept(stranger: Visitor) -> None:
    response = stranger.sign_in("Abel", "not this one at all")
    text = response.get_data(as_text=True)
    assert response.status_code == 422
    assert "Name and password do not belong together." in text
    assert 'value="Abel"' in text
    assert "not this one at all" not in text
    assert stranger.get("/").status_code == 303


def test_an_unknown_name_is_answered_as_a_wrong_password(stranger: Visitor) -> None:
    unknown, wrong = stranger.sign_in("Nobody", "x" * 12), stranger.sign_in("Abel", "x" * 12)
    assert unknown.status_code == wrong.status_code == 422
    said = "Name and password do not belong together."
    assert said in unknown.get_data(as_text=True)
    assert said in wrong.get_data(as_text=True)


def test_an_empty_field_says_what_is_missing(stranger: Visitor) -> None:
    text = stranger.sign_in("", "").get_data(as_text=True)
    assert "Write your name." in text
    assert "Write your password." in text


def test_failed_tries_are_slowed_down_for_that_name_alone(stranger: Visitor) -> None:
    for _ in range(5):
        assert stranger.sign_in("Abel", "wrong wrong wrong").status_code == 422
    held = stranger.sign_in("Abel", PASSWORD)
    assert held.status_code == 429
    assert held.headers["Retry-After"] == "60"
    assert "Wait a minute" in held.get_data(as_text=True)
    assert stranger.sign_in("Tove").status_code == 303


def test_right_passwords_are_never_counted(stranger: Visitor) -> None:
    for _ in range(6):
        assert stranger.sign_in("Abel").status_code == 303


def test_a_form_without_a_token_of_the_session_is_refused(stranger: Visitor) -> None:
    response = stranger.client.post("/sign-in", data={"name": "Abel", "password": PASSWORD})
    assert response.status_code == 400
    assert "from another session" in response.get_data(as_text=True)


def test_a_signed_in_person_cannot_be_made_to_post_from_elsewhere(
    visitor: Callable[[str], Visitor], yard: Yard
) -> None:
    abel = visitor("Abel")
    path = f"/calibrations/{yard.proposal.calibration_id}/adoption"
    assert abel.client.post(path, data={"reason": "no token"}).status_code == 400
    assert "Proposed: an approver decides." in abel.text(f"/calibrations/{yard.proposal.calibration_id}")


def test_signing_out_is_a_post_and_ends_the_session(visitor: Callable[[str], Visitor]) -> None:
    abel = visitor("Abel")
    assert abel.get("/sign-out").status_code == 405
    assert abel.post("/sign-out", "/").location == "/sign-in"
    assert abel.get("/").status_code == 303


def test_a_changed_password_ends_the_sessions_begun_with_the_one_before() -> None:
    person = Person("Abel", "approver", "hash one", StandingClock()())
    session_id = SignedIn(person).get_id()
    assert SignedIn(person).holds(session_id)
    assert not SignedIn(Person("Abel", "approver", "hash two", StandingClock()())).holds(session_id)
    assert "hash one" not in session_id


def test_a_session_of_a_person_who_is_not_there_is_nobodys(stranger: Visitor, services: Services) -> None:
    ghost = Person("Ghost", "keeper", "a hash", services.now() - timedelta(days=1))
    with stranger.client.session_transaction() as session:
        session["_user_id"] = SignedIn(ghost).get_id()
    assert stranger.get("/").status_code == 303
    with services.read() as c:
        assert people.by_name(c, "Ghost") is None


def test_every_answer_carries_the_content_policy(visitor: Callable[[str], Visitor], stranger: Visitor) -> None:
    abel = visitor("Abel")
    for response in (abel.get("/"), abel.get("/no-such-page"), stranger.get("/sign-in"), stranger.get("/")):
        assert response.headers["Content-Security-Policy"] == CONTENT_POLICY
        assert response.headers["X-Content-Type-Options"] == "nosniff"
    assert "unsafe" not in CONTENT_POLICY


def test_the_session_cookie_is_out_of_reach_of_scripts_and_of_other_sites(stranger: Visitor) -> None:
    cookie = stranger.sign_in("Abel").headers["Set-Cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=Lax" in cookie


def test_a_vehicles_key_opens_no_page_and_a_session_no_door_of_the_api(visitor: Callable[[str], Visitor]) -> None:
    assert visitor("Kim").get("/api/v1/vehicles").status_code == 401


def test_a_database_that_cannot_be_reached_is_said_on_a_page_even_to_a_session(
    tmp_path: Path, clock: StandingClock
) -> None:
    lost = Visitor(create_app(services_in(tmp_path / "nowhere" / "at all", clock)).test_client())
    with lost.client.session_transaction() as session:
        session["_user_id"] = SignedIn(Person("Abel", "approver", "a hash", clock())).get_id()
    response = lost.get("/")
    assert response.status_code == 503
    assert "<h1>Not ready</h1>" in response.get_data(as_text=True)
