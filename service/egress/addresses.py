"""Which network addresses an outgoing request may reach.

Only public unicast addresses, and what the operator allows by network. An address that
carries an IPv4 address inside may be reached only if that one may be reached too.

Sources: the IANA IPv4 and IPv6 Special-Purpose Address Registries and the RFCs beside
each entry. An explicit list stands here because the standard library's answers changed
between releases of Python.
"""

from collections.abc import Iterable
from ipaddress import (
    IPv4Address,
    IPv4Network,
    IPv6Address,
    IPv6Network,
    ip_network,
)
from typing import Final

Address = IPv4Address | IPv6Address
Network = IPv4Network | IPv6Network

_WORDS_BY_NETWORK: Final = {
    "0.0.0.0/32": "an unspecified address",
    "0.0.0.0/8": "an address of this network",  # RFC 791
    "10.0.0.0/8": "a private address",  # RFC 1918
    "100.64.0.0/10": "a shared carrier address",  # RFC 6598
    "127.0.0.0/8": "a loopback address",  # RFC 1122
    "168.63.129.16/32": "a metadata address",  # a cloud's platform service, published by it
    "169.254.169.254/32": "a metadata address",
    "169.254.0.0/16": "a link-local address",  # RFC 3927
    "172.16.0.0/12": "a private address",  # RFC 1918
    "192.0.0.0/24": "a reserved address",  # RFC 6890
    "192.0.2.0/24": "a documentation address",  # RFC 5737
    "192.88.99.0/24": "a tunnel address",  # 6to4 relay anycast, RFC 7526
    "192.168.0.0/16": "a private address",  # RFC 1918
    "198.18.0.0/15": "a benchmarking address",  # RFC 2544
    "198.51.100.0/24": "a documentation address",  # RFC 5737
    "203.0.113.0/24": "a documentation address",  # RFC 5737
    "224.0.0.0/4": "a multicast address",  # RFC 5771
    "255.255.255.255/32": "a broadcast address",  # RFC 919
    "240.0.0.0/4": "a reserved address",  # RFC 1112
    "::/128": "an unspecified address",  # RFC 4291
    "::1/128": "a loopback address",  # RFC 4291
    "::ffff:0:0/96": "a mapped address",  # RFC 4291
    "::ffff:0:0:0/96": "a translated address",  # RFC 2765
    "::/96": "a reserved address",  # IPv4-compatible, RFC 4291
    "64:ff9b::/96": "a translated address",  # NAT64, RFC 6052
    "64:ff9b:1::/48": "a translated address",  # NAT64 for local use, RFC 8215
    "100::/64": "a discard address",  # RFC 6666
    "2001::/32": "a tunnel address",  # Teredo, RFC 4380
    "2001:2::/48": "a benchmarking address",  # RFC 5180
    "2001::/23": "a reserved address",  # IETF protocol assignments, RFC 2928
    "2001:db8::/32": "a documentation address",  # RFC 3849
    "2002::/16": "a tunnel address",  # 6to4, RFC 3056
    "3fff::/20": "a documentation address",  # RFC 9637
    "fc00::/7": "a private address",  # unique local, RFC 4193; clouds' IPv6 metadata too
    "fe80::/10": "a link-local address",  # RFC 4291
    "fec0::/10": "a private address",  # site-local, RFC 3879
    "ff00::/8": "a multicast address",  # RFC 4291
}
# Of networks that lie in one another the first fits.
_FORBIDDEN: Final[tuple[tuple[Network, str], ...]] = tuple(
    (ip_network(text), words) for text, words in _WORDS_BY_NETWORK.items()
)
_GLOBAL_UNICAST: Final = IPv6Network("2000::/3")
_CARRY_IPV4_LAST: Final = tuple(
    IPv6Network(text)
    for text in ("::ffff:0:0/96", "::ffff:0:0:0/96", "64:ff9b::/96", "64:ff9b:1::/48", "::/96")
)
# Upper half of an interface identifier that ends in an IPv4 address (ISATAP, RFC 5214).
_ISATAP: Final = frozenset({0x00005EFE, 0x02005EFE})
_LOW_32: Final = 0xFFFFFFFF


def refusal(address: Address, allowed: Iterable[Network]) -> str | None:
    """Return what kind of address this is if it may not be reached, else None.

    A network of `allowed` opens the addresses in it, written as the network is: an IPv4
    network opens none that wrap an IPv4 address in IPv6.
    """
    allowed = tuple(allowed)
    if isinstance(address, IPv6Address):
        # A zone names a link of this machine.
        if address.scope_id is not None:
            return "an address with a zone"
        inner = _carried(address)
        if inner is not None and refusal(inner, allowed) is not None:
            return _kind(address) or f"an address that wraps {_kind(inner)}"
    return None if is_within(address, allowed) else _kind(address)


def is_within(address: Address, networks: Iterable[Network]) -> bool:
    """Return whether one of the networks holds the address."""
    return any(address in network for network in networks)


def _kind(address: Address) -> str | None:
    """Return what makes an address not public, None for a public one."""
    for network, words in _FORBIDDEN:
        if address in network:
            return words
    if isinstance(address, IPv6Address) and address not in _GLOBAL_UNICAST:
        return "a reserved address"
    # What a newer standard library knows beyond the list above.
    return None if address.is_global and not address.is_reserved else "a reserved address"


def _carried(address: IPv6Address) -> IPv4Address | None:
    """Return the IPv4 address that a translator or tunnel would make of this one."""
    if address.sixtofour is not None:
        return address.sixtofour
    if address.teredo is not None:
        return address.teredo[1]
    number = int(address)
    isatap = number >> 32 & _LOW_32 in _ISATAP
    loopback_or_unspecified = number <= 1
    if isatap or (is_within(address, _CARRY_IPV4_LAST) and not loopback_or_unspecified):
        return IPv4Address(number & _LOW_32)
    return None
