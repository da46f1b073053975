"""Where a request goes: reading its URL, and resolving its name once."""

import re
import socket
import threading
from collections.abc import Callable, Sequence
from ipaddress import ip_address
from typing import Final

import httpx

from service.egress.addresses import Address, Network, is_within, refusal
from service.errors import FurrowlightError, RejectedInput, Unavailable

MAX_URL_CHARACTERS: Final = 2_000
REGISTRATION_SECONDS: Final = 5.0

INVALID: Final = "address-invalid"
FORBIDDEN: Final = "address-forbidden"
UNRESOLVED: Final = "address-unresolved"

Resolver = Callable[[str, int], Sequence[str]]
"""Gives the addresses of a name as text, or raises OSError; the port is a hint only."""

_DEFAULT_PORTS: Final = {"https": 443, "http": 80}
_MAX_PORT: Final = 65_535
_MAX_NAME_CHARACTERS: Final = 253
_LABEL: Final = r"[a-z0-9_](?:[a-z0-9_-]{0,61}[a-z0-9_])?"
_NAME: Final = re.compile(rf"{_LABEL}(?:\.{_LABEL})*")
# A last label like this makes resolvers read the whole as a number: 0x7f.1, 2130706433.
_NUMBER: Final = re.compile(r"(?:.*\.)?(?:[0-9]+|0x[0-9a-f]*)")

_NO_PLAIN: Final = (
    "Plain http is for networks that the operator allows; give an address with https."
)


def system_resolver(host: str, port: int) -> list[str]:
    """Ask the machine's resolver."""
    found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)
    return [str(endpoint[0]) for *_, endpoint in found]


def check_address(
    url: str,
    allowed: Sequence[Network],
    *,
    pointer: str = "/url",
    resolve: Resolver = system_resolver,
    seconds: float = REGISTRATION_SECONDS,
) -> None:
    """Refuse a URL that requests could not be sent to, when it is registered.

    That it passes promises nothing: every request vets the address again.

    Raises
    ------
    RejectedInput
        The URL is no plain address, its name doesn't resolve, or it leads to an address
        that is off limits.
    """
    try:
        vetted(read_url(url), allowed, resolve=resolve, seconds=seconds)
    except FurrowlightError as error:
        raise RejectedInput.at(pointer, error.detail, code=error.code) from error


def read_url(url: str, *, longest: int = MAX_URL_CHARACTERS) -> httpx.URL:
    """Read a URL, strictly: what is read here is what the request is sent to."""
    if len(url) > longest:
        raise _invalid(f"The address is longer than {longest} characters; shorten it.")
    try:
        target = httpx.URL(url)
    except (httpx.InvalidURL, ValueError) as error:
        raise _invalid("This is not a web address; give one like https://host/path.") from error
    if target.scheme not in _DEFAULT_PORTS:
        raise _invalid("The address must start with https://.")
    if target.userinfo:
        raise _invalid("The address must not hold a user name or password; take it out.")
    if target.port is not None and not 1 <= target.port <= _MAX_PORT:
        raise _invalid(f"The port must be from 1 to {_MAX_PORT}.")
    if _literal(target) is None:
        _check_name(target.raw_host.decode("ascii"))
    return target


def port_of(url: httpx.URL) -> int:
    """Return the port that a request to the URL connects to."""
    return url.port or _DEFAULT_PORTS[url.scheme]


def vetted(
    url: httpx.URL, allowed: Sequence[Network], *, resolve: Resolver, seconds: float
) -> tuple[Address, ...]:
    """Resolve the URL's name, once, and return its addresses if all of them may be reached.

    One forbidden address among several refuses them all: a public service has none.

    Raises
    ------
    RejectedInput
        An address is off limits, or plain http is not allowed there.
    Unavailable
        The name doesn't resolve within the time.
    """
    plain = url.scheme == "http"
    # Without an allowed network no look-up can help; and then none is made.
    if plain and not allowed:
        raise RejectedInput(FORBIDDEN, _NO_PLAIN)
    literal = _literal(url)
    addresses = (literal,) if literal else _look_up(url, resolve=resolve, seconds=seconds)
    for address in addresses:
        if kind := refusal(address, allowed):
            raise RejectedInput(
                FORBIDDEN,
                f"It leads to {kind}, where this service sends nothing unless the operator "
                "allows that network.",
            )
        if plain and not is_within(address, allowed):
            raise RejectedInput(FORBIDDEN, _NO_PLAIN)
    return addresses


def _literal(url: httpx.URL) -> Address | None:
    """Return the address that stands in the URL itself, None for a name."""
    try:
        return ip_address(url.raw_host.decode("ascii"))
    except ValueError:
        return None


def _check_name(host: str) -> None:
    if _NUMBER.fullmatch(host):
        raise _invalid("Write the IP address as four decimal numbers without leading zeros.")
    if len(host) > _MAX_NAME_CHARACTERS or not _NAME.fullmatch(host):
        raise _invalid("The host of the address is no valid name; check how it is written.")


def _look_up(url: httpx.URL, *, resolve: Resolver, seconds: float) -> tuple[Address, ...]:
    """Resolve in a thread of its own, because the system's resolver takes no time limit."""
    found: list[tuple[Address, ...]] = []

    def ask() -> None:
        try:
            texts = resolve(url.raw_host.decode("ascii"), port_of(url))
            found.append(tuple(dict.fromkeys(ip_address(text) for text in texts)))
        except (OSError, ValueError):
            # Not found, or an answer that is no address: nothing is known, as after the time.
            found.append(())

    asking = threading.Thread(target=ask, name="resolve", daemon=True)
    asking.start()
    asking.join(max(seconds, 0.0))
    if not found or not found[0]:
        raise Unavailable(UNRESOLVED, "The name of the host doesn't resolve; check its spelling.")
    return found[0]


def _invalid(detail: str) -> RejectedInput:
    return RejectedInput(INVALID, detail)
