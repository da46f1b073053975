"""What one guarded request takes at most, and what it makes of odd servers."""

import gzip
import os
import socket
import ssl
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from ipaddress import IPv4Address

import httpx
import pytest

from service.egress.addresses import Address
from service.egress.client import (
    BROKEN_ANSWER,
    TIMED_OUT,
    TLS_FAILED,
    UNREACHABLE,
    GuardedTransport,
    Limits,
    send,
)
from service.egress.wire import dial
from service.errors import Unavailable
from tests.receiving import (
    CERTIFICATE,
    CERTIFIED_NAME,
    LONG,
    LOOPBACK,
    SHORT,
    Behaviour,
    Connection,
    Receiver,
    answering,
    receiving,
    transport,
)

# Far above the caps in these tests, far below what the servers would take.
SOON_SECONDS = 5.0


@contextmanager
def soon() -> Iterator[None]:
    started = time.monotonic()
    yield
    assert time.monotonic() - started < SOON_SECONDS


def posted(receiver: Receiver, *, client: GuardedTransport | None = None) -> str:
    """Post to a server that gives no answer, return the kind of failure."""
    with soon(), pytest.raises(Unavailable) as failed:
        send(client or transport(limits=SHORT), "POST", receiver.url, headers={}, content=b"{}")
    return failed.value.code


def test_an_answer_within_the_limits_is_whole() -> None:
    with receiving(answering("201 Made", body=b"thanks", fields=("X-Seen: yes",))) as receiver:
        answer = send(transport(), "POST", receiver.url, headers={"x-sent": "1"}, content=b"{}")
    assert (answer.status, answer.body, answer.is_complete) == (201, b"thanks", True)
    assert answer.headers["x-seen"] == "yes"
    assert receiver.requests[0].headers["x-sent"] == "1"
    assert receiver.requests[0].headers["content-length"] == "2"


@pytest.mark.parametrize(("size", "is_complete"), [(1023, True), (1024, True), (1025, False)])
def test_the_body_is_kept_up_to_the_cap(size: int, is_complete: bool) -> None:  # noqa: FBT001
    body = os.urandom(size)
    with receiving(answering(body=body)) as receiver:
        answer = send(transport(), "POST", receiver.url, headers={})
    assert (answer.body, answer.is_complete) == (body[:1024], is_complete)


def test_a_packed_body_is_not_unpacked() -> None:
    packed = gzip.compress(bytes(50_000_000), compresslevel=9)
    fields = ("Content-Encoding: gzip",)
    with receiving(answering(body=packed, fields=fields)) as receiver:
        answer = send(transport(), "POST", receiver.url, headers={})
    assert answer.body == packed[:1024]
    assert receiver.requests[0].headers["accept-encoding"] == "identity"


def silent(connection: Connection) -> None:
    connection.pause(10)


def dripping_head(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\nX-Slow: ")
    while connection.pause(0.02):
        connection.send(b"a")


def endless_head(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\n")
    while not connection.ending.is_set():
        connection.send(b"X-More: " + b"a" * 8_000 + b"\r\n")


def endless_interim_answers(connection: Connection) -> None:
    while not connection.ending.is_set():
        connection.send(b"HTTP/1.1 100 Continue\r\n\r\n" * 100)


def no_http(connection: Connection) -> None:
    connection.send(b"220 mail.example ready\r\n")


def hanging_up(_connection: Connection) -> None:
    return


@pytest.mark.parametrize(
    ("behave", "code"),
    [
        (silent, TIMED_OUT),
        (dripping_head, TIMED_OUT),
        (endless_head, BROKEN_ANSWER),
        (endless_interim_answers, BROKEN_ANSWER),
        (no_http, BROKEN_ANSWER),
        (hanging_up, BROKEN_ANSWER),
    ],
)
def test_a_server_without_a_usable_head_is_cut_off(behave: Behaviour, code: str) -> None:
    # The endless ones are to end by their size, however slow this machine is.
    limits = SHORT if code == TIMED_OUT else LONG
    with receiving(behave) as receiver:
        assert posted(receiver, client=transport(limits=limits)) == code


def dripping_body(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\nContent-Length: 900\r\n\r\n")
    while connection.pause(0.02):
        connection.send(b"a")


def endless_body(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\n\r\n")
    while not connection.ending.is_set():
        connection.send(b"a" * 8_000)


def endless_chunk_mark(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n1;x=")
    while not connection.ending.is_set():
        connection.send(b"a" * 8_000)


def endless_small_chunks(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n")
    while not connection.ending.is_set():
        connection.send((b"1;x=" + b"a" * 1_000 + b"\r\na\r\n") * 8)


def broken_off_body(connection: Connection) -> None:
    connection.send(b"HTTP/1.1 200 OK\r\nContent-Length: 900\r\n\r\naaaa")


@pytest.mark.parametrize(
    ("behave", "limits"),
    [
        (dripping_body, SHORT),
        (endless_body, LONG),
        (endless_chunk_mark, LONG),
        (endless_small_chunks, LONG),
        (broken_off_body, LONG),
    ],
)
def test_a_body_without_end_is_cut_and_its_status_holds(behave: Behaviour, limits: Limits) -> None:
    with receiving(behave) as receiver, soon():
        answer = send(transport(limits=limits), "POST", receiver.url, headers={})
    assert (answer.status, answer.is_complete) == (200, False)
    assert set(answer.body) <= {ord("a")}
    assert len(answer.body) <= 1024


def test_a_server_that_does_not_read_is_not_fed_for_ever() -> None:
    with (
        receiving(silent, reads="nothing") as receiver,
        soon(),
        pytest.raises(Unavailable) as failed,
    ):
        send(transport(limits=SHORT), "POST", receiver.url, headers={}, content=bytes(50_000_000))
    assert failed.value.code == TIMED_OUT


def test_a_closed_port_is_unreachable() -> None:
    with receiving() as receiver:
        pass
    assert posted(receiver, client=transport()) == UNREACHABLE


def test_the_next_address_is_tried_when_the_first_does_not_answer() -> None:
    tried: list[str] = []

    def dialer(address: Address, port: int, seconds: float) -> socket.socket:
        tried.append(str(address))
        if len(tried) == 1:
            raise TimeoutError
        return dial(address, port, seconds)

    with receiving() as receiver:
        client = GuardedTransport(
            allowed=[LOOPBACK],
            limits=LONG,
            resolve=lambda _host, _port: ["127.0.0.2", "127.0.0.1"],
            dialer=dialer,
        )
        url = f"http://receiver.example:{receiver.port}/"
        assert send(client, "POST", url, headers={}).status == 200
    assert tried == ["127.0.0.2", "127.0.0.1"]


def test_few_of_many_addresses_are_tried_and_share_the_time() -> None:
    shares: list[float] = []

    def dialer(_address: Address, _port: int, seconds: float) -> socket.socket:
        shares.append(seconds)
        raise TimeoutError

    client = GuardedTransport(
        allowed=[LOOPBACK],
        limits=LONG,
        resolve=lambda _host, _port: [f"127.0.1.{last}" for last in range(1, 200)],
        dialer=dialer,
    )
    with pytest.raises(Unavailable) as failed:
        send(client, "POST", "http://receiver.example/", headers={})
    assert failed.value.code == TIMED_OUT
    assert len(shares) == 4
    assert shares[0] <= LONG.seconds / 4


def to_loopback(_host: str, _port: int) -> list[str]:
    return ["127.0.0.1"]


def trusting() -> ssl.SSLContext:
    return ssl.create_default_context(cafile=str(CERTIFICATE))


def test_tls_names_and_verifies_the_host_of_the_url() -> None:
    with receiving(answering(body=b"hello"), tls=True) as receiver:
        client = transport(resolve=to_loopback, trust=trusting())
        url = f"https://{CERTIFIED_NAME}:{receiver.port}/hook"
        assert send(client, "POST", url, headers={}, content=b"{}").body == b"hello"
    assert receiver.server_names == [CERTIFIED_NAME]
    assert receiver.requests[0].headers["host"] == f"{CERTIFIED_NAME}:{receiver.port}"


@pytest.mark.parametrize(
    ("host", "trust"),
    [("other.example", trusting()), (CERTIFIED_NAME, None), ("127.0.0.1", trusting())],
    ids=["another name", "an unknown issuer", "an address"],
)
def test_a_certificate_that_does_not_hold_is_refused(
    host: str, trust: ssl.SSLContext | None
) -> None:
    with receiving(tls=True) as receiver:
        client = transport(resolve=to_loopback, trust=trust)
        with pytest.raises(Unavailable) as failed:
            send(client, "POST", f"https://{host}:{receiver.port}/", headers={}, content=b"{}")
    assert failed.value.code == TLS_FAILED
    assert receiver.requests == []


def test_certificates_named_by_the_environment_are_not_trusted(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("SSL_CERT_FILE", str(CERTIFICATE))
    with receiving(tls=True) as receiver:
        client = transport(resolve=to_loopback)
        with pytest.raises(Unavailable) as failed:
            send(client, "POST", f"https://{CERTIFIED_NAME}:{receiver.port}/", headers={})
    assert failed.value.code == TLS_FAILED


def test_a_handshake_that_stalls_is_cut_off() -> None:
    with receiving(silent, reads="nothing") as receiver:
        client = transport(limits=SHORT, resolve=to_loopback)
        with soon(), pytest.raises(Unavailable) as failed:
            send(client, "POST", f"https://{CERTIFIED_NAME}:{receiver.port}/", headers={})
    assert failed.value.code == TIMED_OUT


def test_each_request_has_a_connection_of_its_own_and_leaves_none() -> None:
    client = transport()
    before = threading.active_count()
    with receiving() as receiver:
        for _ in range(3):
            send(client, "POST", receiver.url, headers={})
        assert receiver.connections == 3
    assert threading.active_count() == before


def test_a_client_on_the_transport_is_as_guarded() -> None:
    with receiving() as trap:
        redirect = answering("302 Found", fields=(f"Location: https://127.0.0.1:{trap.port}/",))
        with (
            receiving(redirect) as receiver,
            httpx.Client(transport=transport(), trust_env=False) as client,
        ):
            assert client.get(receiver.url).status_code == 302
        assert trap.connections == 0


def test_nothing_is_logged_of_an_address(caplog: pytest.LogCaptureFixture) -> None:
    with caplog.at_level("INFO"), receiving() as receiver:
        send(transport(), "POST", f"{receiver.url}/secret-path", headers={})
    assert "secret-path" not in caplog.text


def test_a_connection_goes_to_the_address_given_and_no_other() -> None:
    with receiving() as receiver:
        with dial(IPv4Address("127.0.0.1"), receiver.port, 5.0) as connection:
            assert connection.getpeername() == ("127.0.0.1", receiver.port)
        # The same port on a neighbouring address, where nothing listens.
        with pytest.raises(OSError):  # noqa: PT011
            dial(IPv4Address("127.0.0.2"), receiver.port, 0.5).close()
