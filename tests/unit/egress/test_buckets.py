"""Signed addresses, held against another library's AWS Signature Version 4 (`botocore`)."""

from urllib.parse import parse_qsl, urlsplit

import pytest
from botocore.auth import S3SigV4QueryAuth
from botocore.awsrequest import AWSRequest
from botocore.credentials import Credentials

from service.egress.buckets import signed_address
from service.errors import RejectedInput

KEY_ID, SECRET, REGION = "made-up", "made-up, too", "eu-central-1"


def signature_of(url: str) -> str:
    """Return what the other library signs the same address with, at the same instant."""
    request = AWSRequest(method="GET", url=url.partition("&X-Amz-Signature=")[0])
    request.context["timestamp"] = signed(url)["X-Amz-Date"]
    auth = S3SigV4QueryAuth(Credentials(KEY_ID, SECRET), "s3", REGION)
    text = auth.string_to_sign(request, auth.canonical_request(request))
    signature: str = auth.signature(text, request)
    return signature


def signed(url: str) -> dict[str, str]:
    return dict(parse_qsl(urlsplit(url).query))


@pytest.fixture(autouse=True)
def _credentials(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("AWS_ACCESS_KEY_ID", KEY_ID)
    monkeypatch.setenv("AWS_SECRET_ACCESS_KEY", SECRET)
    monkeypatch.setenv("AWS_REGION", REGION)


@pytest.mark.parametrize("key", ["a/b.tif", "33 U/ä+b%41.tif", "a=b&c?d#e.tif"])
def test_an_address_is_signed_for_some_minutes_as_another_library_signs_it(key: str) -> None:
    url = signed_address("scenes", key, endpoint="https://store.example:9000")
    told = signed(url)
    assert told["X-Amz-Signature"] == signature_of(url)
    assert 0 < int(told["X-Amz-Expires"]) <= 15 * 60
    assert urlsplit(url).netloc == "store.example:9000"
    assert SECRET not in url


@pytest.mark.parametrize("key", ["../other/a.tif", "a/../../other/a.tif", "a//b.tif", "./a.tif"])
def test_a_key_that_leads_elsewhere_is_none(key: str) -> None:
    with pytest.raises(RejectedInput):
        signed_address("scenes", key, endpoint="https://store.example")
