"""Around every request: policy, ids, refusals in three shapes, bodies that are too large."""

from __future__ import annotations

import errno
import io
import sqlite3

import pytest
from django.db import OperationalError
from django.http import HttpResponse
from django.test import RequestFactory
from django.urls import reverse

from labsite import middleware, policy, views
from labsite.bokeh_static import BokehFinder
from labsite.errors import NotPossible

PROFILE = reverse("accounts:profile")


def through(layer, view, request):
    return layer(view)(request)


def test_every_page_carries_the_strict_policy(cast, as_person):
    answer = as_person(cast.analyst).get(PROFILE)
    rules = answer["Content-Security-Policy"]
    assert "default-src 'none'" in rules and "script-src 'self';" in rules and "unsafe" not in rules
    assert answer["X-Frame-Options"] == "DENY"
    assert answer["X-Content-Type-Options"] == "nosniff"
    assert answer["Cache-Control"] == "private, no-store"


def test_a_plot_page_may_use_inline_styles_and_nothing_else():
    @policy.plot_page
    def page(request):
        return HttpResponse("plot")

    rules = through(middleware.ContentPolicy, page, RequestFactory().get("/"))["Content-Security-Policy"]
    assert rules == policy.PLAIN.replace("style-src 'self'", "style-src 'self' 'unsafe-inline'")
    assert "unsafe-eval" not in rules and rules.count("unsafe") == 1


def test_pages_hold_no_inline_script_style_or_handler(cast, as_person):
    import re

    client = as_person(cast.administrator)
    for url in (PROFILE, reverse("trail:search"), reverse("accounts:people"), reverse("accounts:person", args=[1])):
        page = client.get(url).content.decode()
        assert not re.search(r"<style|\sstyle=|\son\w+=|<script(?![^>]*\ssrc=)", page), url


def test_each_request_has_an_id_of_its_own(db, client):
    first, second = client.get(reverse("health")), client.get(reverse("health"))
    assert len(first["X-Request-Id"]) == 16 and first["X-Request-Id"] != second["X-Request-Id"]


def refused(request):
    raise NotPossible("sample.locked", "The sample is locked.", remedy="Wait.", state="in_review")


@pytest.fixture
def refusing(monkeypatch, cast, as_person):
    """A client whose profile page is refused by a service."""
    from labsite.accounts import urls
    from labsite.accounts import views as pages

    pattern = next(pattern for pattern in urls.urlpatterns if pattern.name == "profile")
    assert pattern.callback is pages.profile
    monkeypatch.setattr(pattern, "callback", refused)
    return as_person(cast.analyst)


def test_a_refusal_is_a_page_with_reason_and_remedy(refusing):
    answer = refusing.get(PROFILE)
    assert answer.status_code == 409
    page = answer.content.decode()
    assert "The sample is locked." in page and "Wait." in page and answer["X-Request-Id"] in page


def test_a_refusal_is_json_for_a_program(refusing):
    answer = refusing.get(PROFILE, headers={"Accept": "application/json"})
    assert answer.status_code == 409
    assert answer.json() == {
        "error": {
            "code": "sample.locked",
            "message": "The sample is locked.",
            "remedy": "Wait.",
            "params": {"state": "in_review"},
            "request": answer["X-Request-Id"],
        }
    }


def test_a_refusal_is_a_fragment_inside_a_page(refusing):
    answer = refusing.get(PROFILE, headers={"HX-Request": "true"})
    assert answer.status_code == 409
    assert answer.content.decode().startswith("<div") and "The sample is locked." in answer.content.decode()


def test_a_failure_shows_no_detail(db):
    page = views.server_error(RequestFactory().get("/"))
    assert page.status_code == 500 and b"Something failed" in page.content
    as_json = views.server_error(RequestFactory().get("/", headers={"accept": "application/json"}))
    assert b'"code": "server.error"' in as_json.content


def test_a_form_from_another_session_is_explained(cast):
    from django.test import Client

    answer = Client(enforce_csrf_checks=True).post(reverse("accounts:sign_in"), {"username": "a", "password": "b"})
    assert answer.status_code == 403 and "another session" in answer.content.decode()


def gate(**extra):
    return through(middleware.UploadGate, lambda request: HttpResponse("in"), RequestFactory().post("/", **extra))


def test_a_body_that_is_too_large_is_refused_by_its_length_alone(settings, db):
    limit = settings.UPLOAD_MAX_BYTES
    cookie = f"{settings.SESSION_COOKIE_NAME}=x"
    assert gate(CONTENT_LENGTH=str(limit), HTTP_COOKIE=cookie).content == b"in"
    answer = gate(CONTENT_LENGTH=str(limit + 1), HTTP_COOKIE=cookie)
    assert answer.status_code == 413 and b"too large" in answer.content


def test_a_stranger_can_send_only_little(settings, db):
    assert gate(CONTENT_LENGTH="2000000").status_code == 413


@pytest.mark.parametrize("length", ["-1", "many", "1.5"])
def test_an_unreadable_length_is_refused(length, db):
    assert gate(CONTENT_LENGTH=length).status_code == 422


def test_only_the_plotting_librarys_one_script_is_served():
    finder = BokehFinder()
    found = finder.find("bokeh/bokeh.min.js")
    assert found.endswith("bokeh.min.js")
    with open(found, "rb") as script:
        assert b"Bokeh" in script.read(2000)
    assert [path for path, _ in finder.list([])] == ["bokeh.min.js"]
    for other in ("bokeh/bokeh.js", "bokeh/../secret", "bokeh.min.js", "bokeh/bokeh-gl.min.js"):
        assert finder.find(other) == []


def test_an_unknown_time_zone_is_an_error_of_the_system_check(settings):
    from labsite.checks import laboratory_time_zone

    assert laboratory_time_zone() == []
    settings.LABORATORY_TIME_ZONE = "Nowhere/Town"
    assert [error.id for error in laboratory_time_zone()] == ["labsite.E001"]


# -- what no database can hold --------------------------------------------------------------------------------------

NUL_ADDRESSES = [
    "/samples/?text=%00",
    "/samples/?%00=text",
    "/trail/?text=a%00b",
    "/trail/record/a%00b/1/",
    "/trail/record/sample/%00/",
    "/no-such-page/%00/",
]


@pytest.mark.parametrize("address", NUL_ADDRESSES)
def test_a_nul_in_an_address_is_refused(cast, as_person, address):
    client = as_person(cast.qa_manager)
    client.raise_request_exception = False
    answer = client.get(address)
    assert answer.status_code == 422 and "request.control_character" in answer.content.decode()


@pytest.mark.parametrize("text", ["a\x00b", "\x00"])
@pytest.mark.parametrize("name", ["username", "password", "next", "other\x00"])
def test_a_nul_in_a_form_is_refused(cast, client, name, text):
    client.raise_request_exception = False
    answer = client.post(reverse("accounts:sign_in"), {"username": "analyst", "password": "x", name: text})
    assert answer.status_code == 422 and "cannot be stored" in answer.content.decode()


def test_half_a_surrogate_pair_is_refused_in_a_form():
    from django.http import QueryDict

    request = RequestFactory().post("/")
    request._post = QueryDict(mutable=True)
    request._post["text"] = "a\ud800"
    layer = middleware.StorableText(lambda request: HttpResponse("in"))
    assert layer.process_view(request, None, (), {}).status_code == 422
    request._post["text"] = "a\U0001f600"
    assert layer.process_view(request, None, (), {}) is None


def test_a_nul_hidden_in_a_cookie_is_refused(settings, db, client):
    client.raise_request_exception = False
    answer = client.get(PROFILE, headers={"Cookie": f'{settings.SESSION_COOKIE_NAME}="aaaaaaaa\\000bbbbbbbb"'})
    assert answer.status_code == 422


def test_a_refused_form_passed_the_forgery_check_first(cast):
    from django.test import Client

    answer = Client(enforce_csrf_checks=True).post(reverse("accounts:sign_in"), {"username": "a\x00"})
    assert answer.status_code == 403 and "another session" in answer.content.decode()


def test_json_is_told_the_code(cast, client):
    answer = client.get("/sign-in/?text=%00", headers={"Accept": "application/json"})
    assert answer.json()["error"]["code"] == "request.control_character"


# -- what breaks a rule of the transport ------------------------------------------------------------------------------


def named_file(name: str = "spectrum.csv") -> io.BytesIO:
    file = io.BytesIO(b"1,2")
    file.name = name
    return file


@pytest.mark.parametrize(
    ("form", "why"),
    [
        (lambda: {"files": [named_file() for _ in range(62)]}, "60 are accepted at once"),
        (lambda: {f"field{number}": "x" for number in range(5000)}, "Too many fields"),
        (lambda: {"text": "x" * 3 * 2**20}, "too long"),
        (lambda: {"files": named_file("x" * 5000 + ".csv")}, "shorter names"),
    ],
    ids=["files", "fields", "text", "file name"],
)
def test_a_form_that_cannot_be_read_is_refused_in_words_on_our_page(cast, as_person, form, why):
    client = as_person(cast.analyst)
    client.raise_request_exception = False
    answer = client.post(PROFILE, form())
    page = answer.content.decode()
    assert answer.status_code == 400
    assert why in page and "request.not_understood" in page and 'class="refusal"' in page


def test_an_unknown_host_gets_our_page_and_nothing_else(db, client):
    answer = client.get("/sign-in/", headers={"Host": "elsewhere.example"})
    assert answer.status_code == 400 and "could not be understood" in answer.content.decode()
    assert "elsewhere" not in answer.content.decode()


# -- a full disk ------------------------------------------------------------------------------------------------------


def full_of_files():
    raise OSError(errno.ENOSPC, "No space left on device")


def full_sqlite():
    cause = sqlite3.OperationalError("database or disk is full")
    cause.sqlite_errorname = "SQLITE_FULL"
    raise OperationalError("database or disk is full") from cause


def full_postgres():
    import psycopg

    raise OperationalError("could not extend file") from psycopg.errors.DiskFull("could not extend file")


@pytest.mark.parametrize("full", [full_of_files, full_sqlite, full_postgres])
def test_a_full_disk_is_said_to_be_one(cast, as_person, monkeypatch, full):
    from labsite.accounts import urls

    pattern = next(pattern for pattern in urls.urlpatterns if pattern.name == "profile")
    monkeypatch.setattr(pattern, "callback", lambda request: full())
    client = as_person(cast.analyst)
    client.raise_request_exception = False
    answer = client.get(PROFILE)
    page = answer.content.decode()
    assert answer.status_code == 507
    assert "disk is full. Nothing was written." in page and "has to make room" in page
    as_json = client.get(PROFILE, headers={"Accept": "application/json"})
    assert (as_json.status_code, as_json.json()["error"]["code"]) == (507, "server.disk_full")


def test_a_disk_that_really_is_full_to_sqlite_is_recognised(tmp_path):
    connection = sqlite3.connect(tmp_path / "small.sqlite3")
    connection.execute("CREATE TABLE t (x)")
    connection.execute("PRAGMA max_page_count = 3")
    with pytest.raises(sqlite3.OperationalError) as full:
        connection.execute("INSERT INTO t VALUES (zeroblob(1000000))")
    connection.close()
    assert views.is_full(full.value)


def test_other_failures_are_not_taken_for_a_full_disk():
    assert not views.is_full(OSError(errno.EACCES, "Permission denied"))
    assert not views.is_full(ValueError("no"))
    assert not views.is_full(None)
