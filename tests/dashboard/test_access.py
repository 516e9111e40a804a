"""Who is refused, and what stands in the head of every answer."""

import pytest
from flask.testing import FlaskClient

from dashboard.access import check_loopback, content_security_policy
from dashboard.errors import NotLoopbackError

OWN = {"Origin": "http://localhost", "Sec-Fetch-Site": "same-origin"}
ADDRESSES = ("/", "/api/live", "/api/journal", "/healthz", "/_dash-layout", "/assets/00-look.css")


@pytest.mark.parametrize("address", ADDRESSES)
@pytest.mark.parametrize(
    "host", ["evil.example", "evil.example:8050", "127.0.0.1.evil.example", "10.0.0.7", ""]
)
def test_a_foreign_host_name_is_refused(client: FlaskClient, address: str, host: str) -> None:
    """A name that somebody points at this machine must not open its pages."""
    assert client.get(address, headers={"Host": host}).status_code == 403


def test_a_cached_file_is_guarded_too(client: FlaskClient) -> None:
    zipped = {"Accept-Encoding": "gzip"}
    assert client.get("/assets/00-look.css", headers=zipped).status_code == 200
    again = client.get("/assets/00-look.css", headers=zipped)
    assert again.headers["Content-Encoding"] == "gzip"
    assert client.get("/assets/00-look.css", headers=zipped | {"Host": "evil.example"}).status_code == 403


@pytest.mark.parametrize("host", ["localhost", "127.0.0.1:8050", "[::1]:8050", "LOCALHOST:1"])
def test_a_loopback_name_is_answered(client: FlaskClient, host: str) -> None:
    assert client.get("/api/live", headers={"Host": host}).status_code == 200


@pytest.mark.parametrize(
    "headers",
    [
        {},
        {"Origin": "http://evil.example"},
        {"Origin": "null"},
        {"Origin": "https://localhost"},
        {"Origin": "http://localhost:1"},
        {"Sec-Fetch-Site": "cross-site"},
        {"Sec-Fetch-Site": "same-site"},
        {"Sec-Fetch-Site": "none"},
        {"Origin": "http://evil.example", "Sec-Fetch-Site": "same-origin"},
        {"Origin": "http://localhost", "Sec-Fetch-Site": "cross-site"},
    ],
)
@pytest.mark.parametrize("address", ["/api/acknowledge", "/_dash-update-component"])
def test_a_post_that_is_not_of_our_own_pages_is_refused(
    client: FlaskClient, headers: dict[str, str], address: str
) -> None:
    assert client.post(address, json={}, headers=headers).status_code == 403


@pytest.mark.parametrize("headers", [{"Origin": "http://localhost"}, {"Sec-Fetch-Site": "same-origin"}, OWN])
def test_our_own_page_gets_through_to_the_door(client: FlaskClient, headers: dict[str, str]) -> None:
    """The door then finds that nothing was asked."""
    assert client.post("/api/acknowledge", json={}, headers=headers).status_code == 400


@pytest.mark.parametrize(
    "kind", ["text/plain", "application/x-www-form-urlencoded", "multipart/form-data", ""]
)
def test_only_json_is_read(client: FlaskClient, kind: str) -> None:
    """A simple form of another site cannot send JSON."""
    answer = client.post("/api/acknowledge", data="{}", content_type=kind, headers=OWN)
    assert answer.status_code == 415


@pytest.mark.parametrize("method", ["PUT", "PATCH", "DELETE", "OPTIONS", "TRACE"])
def test_other_methods_are_refused(client: FlaskClient, method: str) -> None:
    assert client.open("/api/acknowledge", method=method, headers=OWN).status_code == 405


def test_a_huge_body_is_refused(client: FlaskClient) -> None:
    answer = client.post("/api/acknowledge", json={"name": "x" * 100_000}, headers=OWN)
    assert answer.status_code in {400, 413}
    assert answer.status_code != 202


@pytest.mark.parametrize("address", [*ADDRESSES, "/no/such/page", "/assets/none.js"])
def test_every_answer_carries_the_headers(client: FlaskClient, address: str) -> None:
    with client.get(address) as answer:
        headers = answer.headers
    policy = headers["Content-Security-Policy"]
    assert "default-src 'self'" in policy
    assert "'unsafe-eval'" not in policy
    assert "'unsafe-inline'" not in policy.split("style-src")[0]
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert headers["Referrer-Policy"] == "same-origin"
    assert headers["Cross-Origin-Resource-Policy"] == "same-origin"


def test_the_policy_opens_styles_only() -> None:
    rules = dict(rule.split(" ", 1) for rule in content_security_policy(["'sha256-x'"]).split("; "))
    assert rules["script-src"] == "'self' 'sha256-x'"
    assert {name for name, value in rules.items() if "unsafe" in value} == {"style-src"}
    assert rules["connect-src"] == "'self'"
    assert rules["frame-ancestors"] == "'none'"


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.168.1.5", "plant.example", "", "127.0.0.1.example"])
def test_an_address_others_could_reach_is_refused_in_words(host: str) -> None:
    with pytest.raises(NotLoopbackError, match="on this machine only"):
        check_loopback(host)


@pytest.mark.parametrize("host", ["127.0.0.1", "127.0.0.2", "::1", "[::1]", "localhost"])
def test_loopback_addresses_are_taken(host: str) -> None:
    check_loopback(host)
