"""Signatures, checked against the specification's vector and its reference library."""

import base64
import binascii
from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st
from standardwebhooks import Webhook, WebhookVerificationError

from service.webhooks.signing import (
    ID_HEADER,
    SIGNATURE_HEADER,
    TIMESTAMP_HEADER,
    is_genuine,
    secret_of,
    signature,
    signed_headers,
)

SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"  # noqa: S105
MESSAGE_ID = "msg_p5jXN8AQM9LWM0D4loKWxJek"
BODY = b'{"test": 2432232314}'
SENT_AT = datetime.fromtimestamp(1614265330, tz=UTC)

SECRETS = st.binary(min_size=24, max_size=64).map(secret_of)
INSTANTS = st.datetimes(
    min_value=datetime(1970, 1, 2),  # noqa: DTZ001
    max_value=datetime(2999, 1, 1),  # noqa: DTZ001
    timezones=st.integers(-14 * 60, 14 * 60).map(lambda m: timezone(timedelta(minutes=m))),
)
IDS = st.text(st.characters(codec="ascii", categories=("L", "N")), min_size=1, max_size=40)


def test_the_published_example_has_the_published_signature() -> None:
    # Vector printed in the tests of the specification's reference libraries.
    found = signature(SECRET, event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    assert found == "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE="


@given(secret=SECRETS, event_id=IDS, sent_at=INSTANTS, text=st.text())
def test_signatures_are_those_of_the_reference_library(
    secret: str, event_id: str, sent_at: datetime, text: str
) -> None:
    # Its signer takes the clock's digits for UTC whatever the zone, so it is given UTC.
    expected = Webhook(secret).sign(event_id, sent_at.astimezone(UTC), text)
    assert signature(secret, event_id=event_id, sent_at=sent_at, body=text.encode()) == expected


def flipped(data: bytes, bit: int) -> bytes:
    bit %= 8 * len(data)
    changed = bytearray(data)
    changed[bit // 8] ^= 1 << bit % 8
    return bytes(changed)


def accepted_by_the_reference(headers: dict[str, str], body: bytes) -> bool:
    try:
        Webhook(SECRET).verify(body, headers, json_parse=False)
    except (WebhookVerificationError, UnicodeDecodeError, binascii.Error, ValueError):
        return False
    return True


@given(bit=st.integers(0, 10_000), part=st.sampled_from(["body", ID_HEADER, TIMESTAMP_HEADER]))
def test_any_flipped_bit_of_body_id_or_timestamp_fails(bit: int, part: str) -> None:
    now = datetime.now(UTC)
    headers = signed_headers([SECRET], event_id=MESSAGE_ID, sent_at=now, body=BODY)
    body = BODY
    assert is_genuine(SECRET, headers=headers, body=body, now=now)
    assert accepted_by_the_reference(headers, body)
    if part == "body":
        body = flipped(body, bit)
    else:
        headers[part] = flipped(headers[part].encode(), bit).decode("latin-1")
    assert not is_genuine(SECRET, headers=headers, body=body, now=now)
    assert not accepted_by_the_reference(headers, body)


@given(bit=st.integers(0, 10_000))
def test_any_flipped_bit_of_the_signature_fails(bit: int) -> None:
    headers = signed_headers([SECRET], event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    headers[SIGNATURE_HEADER] = flipped(headers[SIGNATURE_HEADER].encode(), bit).decode("latin-1")
    assert not is_genuine(SECRET, headers=headers, body=BODY, now=SENT_AT)


def test_both_secrets_verify_while_one_replaces_the_other() -> None:
    new, old, other = (secret_of(bytes([at]) * 32) for at in (1, 2, 3))
    now = datetime.now(UTC)
    headers = signed_headers([new, old], event_id=MESSAGE_ID, sent_at=now, body=BODY)
    assert headers[SIGNATURE_HEADER].count(" ") == 1
    for secret in (new, old):
        assert is_genuine(secret, headers=headers, body=BODY, now=now)
        Webhook(secret).verify(BODY, headers)
    assert not is_genuine(other, headers=headers, body=BODY, now=now)
    with pytest.raises(WebhookVerificationError):
        Webhook(other).verify(BODY, headers)


@pytest.mark.parametrize(
    ("minutes", "is_accepted"), [(-6, False), (-4, True), (4, True), (6, False)]
)
def test_messages_of_another_hour_are_refused(minutes: int, is_accepted: bool) -> None:  # noqa: FBT001
    headers = signed_headers([SECRET], event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    now = SENT_AT + timedelta(minutes=minutes)
    assert is_genuine(SECRET, headers=headers, body=BODY, now=now) is is_accepted


@pytest.mark.parametrize("missing", [ID_HEADER, TIMESTAMP_HEADER, SIGNATURE_HEADER])
def test_a_message_without_one_of_its_headers_is_refused(missing: str) -> None:
    headers = signed_headers([SECRET], event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    del headers[missing]
    assert not is_genuine(SECRET, headers=headers, body=BODY, now=SENT_AT)


@pytest.mark.parametrize("seconds", ["", "-1", "1614265330.5", "1e9", "١٦١٤٢٦٥٣٣٠", "9" * 5_000])
def test_a_timestamp_that_is_no_plain_number_is_refused(seconds: str) -> None:
    headers = signed_headers([SECRET], event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    headers[TIMESTAMP_HEADER] = seconds
    assert not is_genuine(SECRET, headers=headers, body=BODY, now=SENT_AT)


@given(chance=st.binary(min_size=24, max_size=64))
def test_a_secret_holds_its_bytes_behind_the_prefix(chance: bytes) -> None:
    secret = secret_of(chance)
    assert base64.b64decode(secret.removeprefix("whsec_"), validate=True) == chance


@pytest.mark.parametrize("size", [0, 23, 65])
def test_secrets_of_other_lengths_are_not_made(size: int) -> None:
    with pytest.raises(ValueError, match="24 to 64"):
        secret_of(bytes(size))


@pytest.mark.parametrize("secret", ["", "whsec_", "MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw", "whsec_a*b="])
def test_what_is_no_secret_does_not_sign(secret: str) -> None:
    with pytest.raises(ValueError, match="A signing secret"):
        signature(secret, event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)


def test_nothing_is_signed_without_secret_with_a_stop_in_its_id_or_a_naive_time() -> None:
    with pytest.raises(ValueError, match="At least one secret"):
        signed_headers([], event_id=MESSAGE_ID, sent_at=SENT_AT, body=BODY)
    with pytest.raises(ValueError, match="full stop"):
        signature(SECRET, event_id="a.1", sent_at=SENT_AT, body=BODY)
    naive = SENT_AT.replace(tzinfo=None)
    with pytest.raises(ValueError, match="offset"):
        signature(SECRET, event_id=MESSAGE_ID, sent_at=naive, body=BODY)
