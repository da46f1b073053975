"""Keys: who may do what, where, and until when."""

from datetime import timedelta
from typing import Any

import httpx
from sqlalchemy import select

from service.clock import now
from service.store.keys import add_key
from service.store.tables import Answer, ApiKey
from tests.serving import ALL_SCOPES, Service, square

# One request for each scope that something needs so far, on a resource that does not exist:
# whoever passes the key's check gets another answer than 401 and 403.
NEEDS = [
    ("GET", "/v1/parcels", "read"),
    ("GET", "/v1/parcels/none", "read"),
    ("GET", "/v1/parcels/none/boundaries", "read"),
    ("GET", "/v1/parcels/none/seasons", "read"),
    ("GET", "/v1/parcels/none/series", "read"),
    ("GET", "/v1/overview", "read"),
    ("GET", "/v1/scenes", "read"),
    ("GET", "/v1/scenes/none", "read"),
    ("GET", "/v1/scenes/none/parcels", "read"),
    ("GET", "/v1/indices", "read"),
    ("GET", "/v1/indices/ndvi", "read"),
    ("GET", "/v1/sensors", "read"),
    ("PUT", "/v1/parcels", "manage"),
    ("DELETE", "/v1/parcels/none", "manage"),
    ("POST", "/v1/seasons", "manage"),
    ("POST", "/v1/scenes", "ingest"),
    ("POST", "/v1/scenes/none/retry", "ingest"),
    ("DELETE", "/v1/scenes/none", "ingest"),
    ("GET", "/v1/keys", "admin"),
    ("DELETE", "/v1/keys/none", "admin"),
]


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    return document


def make(service: Service, **request: Any) -> httpx.Response:
    """Ask for a key."""
    key, headers = request.pop("key", None), request.pop("headers", {})
    return service.call("POST", "/v1/keys", key=key, headers=headers, json=request)


def labels_of(service: Service, key: str | None = None) -> list[str]:
    """Return the labels of all keys that a key may list."""
    return [entry["label"] for entry in service.get("/v1/keys", key=key)["keys"]]


def test_without_a_valid_key_everything_is_401_and_nothing_is_read(service: Service) -> None:
    bad = {
        "no-key": [None, "", "Basic YTpi", "Bearer"],
        "unknown-key": [
            "Bearer nothing",
            f"Bearer {service.secret}x",
            f"Bearer {service.secret[:-1]}",
            "Bearer flk_",
        ],
    }
    sent_keys = [(code, sent) for code, values in bad.items() for sent in values]
    # Each of them at one address, and at each address one of them.
    asked = [("GET", "/v1/parcels", code, sent) for code, sent in sent_keys]
    asked += [(method, path, "no-key", None) for method, path, _ in NEEDS]
    for method, path, code, sent in asked:
        headers = {} if sent is None else {"Authorization": sent}
        # No body of a stranger is taken to disk: the key is looked at first.
        answer = service.client.request(method, path, headers=headers)
        document = problem(answer, 401, code)
        assert answer.headers["WWW-Authenticate"] == "Bearer"
        assert service.secret not in document["detail"]


def test_a_key_of_one_scope_may_do_what_its_scope_says_and_no_more(service: Service) -> None:
    for scope in ALL_SCOPES:
        key = service.key(scope)
        for method, path, needed in NEEDS:
            answer = service.call(method, path, key=key)
            if needed == scope:
                assert answer.status_code not in (401, 403), (method, path)
            else:
                assert f"`{needed}`" in problem(answer, 403, "scope-missing")["detail"]


def test_a_secret_is_shown_once_and_is_stored_nowhere(service: Service) -> None:
    answer = make(service, label="reader", scopes=["read"])
    assert answer.status_code == 201
    made = answer.json()
    secret = made.pop("secret")
    # 256 random bits are 43 characters of base64url, behind a prefix that scanners know.
    assert secret.startswith("flk_")
    assert len(secret) == 4 + 43
    assert service.call("GET", "/v1/parcels", key=secret).status_code == 200
    listed = service.call("GET", "/v1/keys")
    assert secret not in listed.text
    assert made in listed.json()["keys"]
    with service.sessions.reading() as session:
        row = session.scalars(select(ApiKey).where(ApiKey.public_id == made["id"])).one()
        told = " ".join(str(getattr(row, column.name)) for column in ApiKey.__table__.columns)
    assert secret not in told
    assert secret[4:] not in told


def test_a_key_cannot_make_one_wider_than_itself(service: Service) -> None:
    narrow = service.key("admin", "read")
    limited = service.key("admin", "read", "manage", holdings=["north", "south"])
    ending = make(service, label="e", scopes=["admin"], expires_at="2099-01-01T00:00:00Z")
    before = labels_of(service)
    wider: list[tuple[str, dict[str, Any]]] = [
        (narrow, {"scopes": ["manage"]}),
        (narrow, {"scopes": ["read", "ingest"]}),
        (limited, {"scopes": ["read"]}),
        (limited, {"scopes": ["read"], "holdings": None}),
        (limited, {"scopes": ["read"], "holdings": ["north", "east"]}),
        (limited, {"scopes": ["ingest"], "holdings": ["north"]}),
        (ending.json()["secret"], {"scopes": ["admin"]}),
        (
            ending.json()["secret"],
            {"scopes": ["admin"], "expires_at": "2099-01-01T00:00:01Z"},
        ),
    ]
    for key, sent in wider:
        problem(make(service, key=key, label="wider", **sent), 403, "key-too-wide")
    assert labels_of(service) == before
    for key, sent in [
        (narrow, {"scopes": ["admin", "read"]}),
        (limited, {"scopes": ["read"], "holdings": ["north"]}),
    ]:
        assert make(service, key=key, label="as wide", **sent).status_code == 201


def test_a_key_limited_to_holdings_sees_and_revokes_only_keys_within_them(
    service: Service,
) -> None:
    limited = service.key("admin", "read", holdings=["north", "south"])
    inside = make(service, label="inside", scopes=["read"], holdings=["north"]).json()
    outside = make(service, label="outside", scopes=["read"], holdings=["north", "east"]).json()
    free = make(service, label="free", scopes=["read"]).json()
    assert "inside" in labels_of(service, limited)
    assert not {"outside", "free"} & set(labels_of(service, limited))
    for other in (outside, free):
        answer = service.call("DELETE", f"/v1/keys/{other['id']}", key=limited)
        problem(answer, 404, "key-not-found")
        assert service.call("GET", "/v1/parcels", key=other["secret"]).status_code == 200
    assert service.call("DELETE", f"/v1/keys/{inside['id']}", key=limited).status_code == 200
    problem(service.call("GET", "/v1/parcels", key=inside["secret"]), 401, "unknown-key")


def test_outside_its_holdings_everything_answers_as_if_it_did_not_exist(service: Service) -> None:
    service.put_parcels(
        square("mine", col=0, row=0, holding="north"),
        square("theirs", col=20, row=0, holding="east"),
        square("nobodys", col=0, row=20),
    )
    key = service.key("read", "manage", holdings=["north"])
    listed = service.get("/v1/parcels", key=key)["features"]
    assert [feature["id"] for feature in listed] == ["mine"]
    assert service.get("/v1/parcels", key=key, params={"holding": "east"})["features"] == []
    assert [row["parcel"] for row in service.get("/v1/overview", key=key)["parcels"]] == ["mine"]
    for method, path in [
        ("GET", ""),
        ("GET", "/boundaries"),
        ("GET", "/seasons"),
        ("GET", "/series"),
        ("DELETE", ""),
    ]:
        told = []
        for ref in ("theirs", "nobodys", "absent"):
            answer = service.call(method, f"/v1/parcels/{ref}{path}", key=key)
            document = problem(answer, 404, "parcel-not-found")
            assert document.pop("instance") == f"/v1/parcels/{ref}{path}"
            told.append(document)
        assert told[0] == told[1] == told[2]
    for ref in ("theirs", "nobodys", "absent"):
        sent = {"parcel": ref, "crop": "maize", "year": 2024}
        document = problem(
            service.call("POST", "/v1/seasons", key=key, json=sent), 422, "invalid-input"
        )
        assert document["errors"][0]["pointer"] == "/parcel"
    assert service.get("/v1/parcels/theirs")["properties"]["retired_at"] is None


def test_a_limited_key_puts_parcels_into_its_holdings_only(service: Service) -> None:
    service.put_parcels(
        square("mine", col=0, row=0, holding="north"),
        square("theirs", col=20, row=0, holding="east"),
    )
    key = service.key("read", "manage", holdings=["north"])
    # The one leak, documented: a ref that is taken elsewhere.
    for sent in (
        square("theirs", col=5, row=5),
        square("theirs", col=5, row=5, holding="north"),
        square("theirs", col=5, row=5, holding="east"),
    ):
        document = problem(service.put_parcels(sent, key=key), 409, "ref-taken")
        assert document["errors"][0]["pointer"] == "/features/0/properties/ref"
    for sent in (
        square("new", col=0, row=20),
        square("new", col=0, row=20, holding="east"),
        square("mine", col=0, row=0, holding=None),
        square("mine", col=0, row=0, holding="east"),
    ):
        document = problem(service.put_parcels(sent, key=key), 422, "invalid-input")
        assert document["errors"][0]["pointer"] == "/features/0/properties/holding"
    assert {
        feature["id"]: feature["properties"]["holding"]
        for feature in service.get("/v1/parcels")["features"]
    } == {"mine": "north", "theirs": "east"}
    taken = service.put_parcels(
        square("mine", col=0, row=0, name="Long Field"),
        square("new", col=0, row=20, holding="north"),
        key=key,
    )
    assert (taken.json()["created"], taken.json()["updated"]) == (1, 1)
    # An overlap with a parcel that the key may not see is not told of.
    over = service.put_parcels(square("over", col=20, row=0, holding="north"), key=key)
    assert over.json()["warnings"] == []


def test_a_limited_key_touches_no_scene(service: Service) -> None:
    key = service.key("ingest", "read", holdings=["north"])
    for method, path in [("POST", "/v1/scenes/s/retry"), ("DELETE", "/v1/scenes/s")]:
        problem(service.call(method, path, key=key), 403, "key-limited")


def test_a_revoked_key_is_out_at_once_and_stays_listed(service: Service) -> None:
    made = make(service, label="short", scopes=["read"]).json()
    assert service.call("GET", "/v1/parcels", key=made["secret"]).status_code == 200
    first = service.call("DELETE", f"/v1/keys/{made['id']}")
    assert first.status_code == 200
    assert first.json()["revoked_at"] is not None
    problem(service.call("GET", "/v1/parcels", key=made["secret"]), 401, "unknown-key")
    # Doing it again changes nothing, the time included.
    assert service.call("DELETE", f"/v1/keys/{made['id']}").json() == first.json()
    assert first.json() in service.get("/v1/keys")["keys"]
    problem(service.call("DELETE", "/v1/keys/key_0"), 404, "key-not-found")


def test_a_key_expires(service: Service) -> None:
    at = now()
    with service.sessions.writing() as session:
        secrets = [
            add_key(
                session,
                label="test",
                scopes=["read"],
                holdings=None,
                expires_at=at + timedelta(seconds=seconds),
                created_at=at - timedelta(days=1),
            )[1]
            for seconds in (-1, 3600)
        ]
    problem(service.call("GET", "/v1/parcels", key=secrets[0]), 401, "unknown-key")
    assert service.call("GET", "/v1/parcels", key=secrets[1]).status_code == 200
    past = make(service, label="late", scopes=["read"], expires_at="2020-01-01T00:00:00Z")
    assert problem(past, 422, "invalid-input")["errors"][0]["pointer"] == "/expires_at"
    # Any offset is taken, and answered in UTC.
    later = make(service, label="later", scopes=["read"], expires_at="2999-01-01T01:30:00+01:30")
    assert later.json()["expires_at"] == "2999-01-01T00:00:00Z"


FAULTY: list[tuple[dict[str, Any], str]] = [
    ({"scopes": ["read"]}, "/label"),
    ({"label": "a"}, "/scopes"),
    ({"label": "a", "scopes": []}, "/scopes"),
    ({"label": "a", "scopes": ["reed"]}, "/scopes/0"),
    ({"label": "=1+1", "scopes": ["read"]}, "/label"),
    ({"label": "a", "scopes": ["read"], "holdings": []}, "/holdings"),
    ({"label": "a", "scopes": ["read"], "holdings": ["a/b"]}, "/holdings/0"),
    ({"label": "a", "scopes": ["read"], "expires_at": "2999-01-01T00:00:00"}, "/expires_at"),
    ({"label": "a", "scopes": ["read"], "expires_at": "2999-01-01"}, "/expires_at"),
    ({"label": "a", "scopes": ["read"], "zebra": 1}, "/zebra"),
]


def test_a_faulty_request_makes_no_key(service: Service) -> None:
    before = service.get("/v1/keys")
    for sent, pointer in FAULTY:
        document = problem(make(service, **sent), 422, "invalid-input")
        assert [error["pointer"] for error in document["errors"]] == [pointer]
    assert service.get("/v1/keys") == before


def test_a_repeated_request_under_one_idempotency_key_makes_one_key(service: Service) -> None:
    headers = {"Idempotency-Key": "4f1c"}
    first = make(service, label="once", scopes=["read"], headers=headers)
    assert first.status_code == 201
    again = make(service, label="once", scopes=["read"], headers=headers)
    assert first.json()["secret"] not in again.text
    problem(again, 409, "secret-shown")
    problem(
        make(service, label="other", scopes=["read"], headers=headers),
        422,
        "idempotency-key-reused",
    )
    assert labels_of(service).count("once") == 1
    assert "other" not in labels_of(service)
    with service.sessions.reading() as session:
        kept = session.scalars(select(Answer.body)).all()
    assert len(kept) == 1
    assert first.json()["secret"].encode() not in kept[0]
    # Keys of this name belong to the caller: another one makes its own.
    other = service.key("admin", "read")
    assert (
        make(service, key=other, label="twice", scopes=["read"], headers=headers).status_code == 201
    )


def test_keys_are_listed_page_by_page(service: Service) -> None:
    for number in range(4):
        make(service, label=f"k{number}", scopes=["read"])
    labels: list[str] = []
    path: str | None = "/v1/keys?limit=2"
    while path is not None:
        answer = service.call("GET", path)
        labels += [entry["label"] for entry in answer.json()["keys"]]
        path = answer.links.get("next", {}).get("url")
    assert labels == labels_of(service)
    assert labels[-4:] == ["k0", "k1", "k2", "k3"]
