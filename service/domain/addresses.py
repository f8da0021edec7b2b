"""
Addresses that notices may go to, and which of them lie outside of the networks that only insiders reach. Pure.

An address is taken in one strict form, so that no two readers of it can disagree about where it leads: numbers in other
notations than four decimal parts, names with a zone or a user, and whatever else a resolver might read in its own way
are refused. What a name resolves to is judged at each delivery, on the very address that is then connected to.
"""

import re
from dataclasses import dataclass
from ipaddress import IPv4Address, IPv4Network, IPv6Address, IPv6Network, ip_address

LONGEST_ADDRESS = 2000

_ADDRESS = re.compile(
    r"(?P<scheme>https?)://(?P<host>\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9._-]+)(:(?P<port>[0-9]{1,5}))?"
    r"(?P<path>/[A-Za-z0-9._~:/?@!$&'()*+,;=%-]*)?"
)
_LABEL = re.compile(r"[A-Za-z0-9_]([A-Za-z0-9_-]{0,61}[A-Za-z0-9_])?")
# A last label that some resolver reads as a number, so that the whole is an address in another notation.
_NUMBER = re.compile(r"[0-9]+|0[xX][0-9A-Fa-f]*")

_PORTS = {"https": 443, "http": 80}
LONGEST_HOST, LARGEST_PORT = 253, 65_535

# Written out, because what the standard library counts as global differs from version to version.
# Version 4: this network, private, shared, loopback, link-local, assigned to protocols, for documents and measurements,
# relays of tunnels, multicast and reserved.
_SPECIAL = tuple(
    map(
        IPv4Network,
        (
            *("0.0.0.0/8", "10.0.0.0/8", "100.64.0.0/10", "127.0.0.0/8", "169.254.0.0/16", "172.16.0.0/12"),
            *("192.0.0.0/24", "192.0.2.0/24", "192.88.99.0/24", "192.168.0.0/16", "198.18.0.0/15"),
            *("198.51.100.0/24", "203.0.113.0/24", "224.0.0.0/3"),
        ),
    )
)
# Version 6: all that is given out for everybody lies in one network, but for these: protocols with one kind of tunnel,
# documents, the other kind of tunnel, documents again.
_GIVEN_OUT = IPv6Network("2000::/3")
_SPECIAL_IN_IT = tuple(map(IPv6Network, ("2001::/23", "2001:db8::/32", "2002::/16", "3fff::/20")))
# What stands for an address of version 4 that it carries (RFC 6052).
_TRANSLATED = IPv6Network("64:ff9b::/96")


class UnfitAddress(Exception):
    """Nothing may be sent there; the text says why."""


@dataclass(frozen=True)
class Allowed:
    """What the settings allow beyond HTTPS to public addresses."""

    plain_http: bool = False
    private_targets: bool = False


@dataclass(frozen=True)
class Target:
    """An address in its parts; a literal of version 6 without its brackets."""

    scheme: str
    host: str
    port: int
    path: str

    @property
    def authority(self) -> str:
        """What a request names as its host."""
        host = f"[{self.host}]" if ":" in self.host else self.host
        return host if self.port == _PORTS[self.scheme] else f"{host}:{self.port}"


def target_of(address: str, allowed: Allowed) -> Target:
    """
    The parts of an address.

    Raises:
        UnfitAddress: It has another form, is not HTTPS where it must be, or names a place that is private by itself.
    """
    found = _ADDRESS.fullmatch(address)
    if found is None or len(address) > LONGEST_ADDRESS:
        raise UnfitAddress(
            "must be https://host[:port][/path][?query] in plain ASCII, without a user and without a fragment"
        )
    target = Target(
        scheme=found["scheme"],
        host=found["host"].strip("[]").lower(),
        port=int(found["port"] or _PORTS[found["scheme"]]),
        path=found["path"] or "/",
    )
    if target.scheme == "http" and not allowed.plain_http:
        raise UnfitAddress("must begin with https://; plain HTTP is not allowed here")
    if not 1 <= target.port <= LARGEST_PORT:
        raise UnfitAddress(f"must have a port from 1 to {LARGEST_PORT}")
    literal = _literal(found["host"])
    if literal is not None:
        check_reachable(literal, allowed)
    elif _is_local_name(target.host) and not allowed.private_targets:
        raise UnfitAddress(f"leads to {target.host}, which is this machine, and private targets are not allowed here")
    return target


def check_reachable(address: str, allowed: Allowed) -> None:
    """
    Ask whether a numeric address may be connected to.

    Raises:
        UnfitAddress: It is not public, and private targets are not allowed.
    """
    if not allowed.private_targets and not is_public(address):
        raise UnfitAddress(f"leads to {address}, which is not public, and private targets are not allowed here")


def is_public(address: str) -> bool:
    """
    True for a numeric address that anybody in the world would reach alike.

    Private, shared, loopback, link-local, multicast, documentation and reserved ones are not, nor are those of version
    6 that carry one of version 4 inside, mapped or tunnelled; a translated one is what it carries.

    Source: the registries of special-purpose addresses (RFC 6890 and its successors).
    """
    number = ip_address(address)
    if isinstance(number, IPv4Address):
        return not any(number in network for network in _SPECIAL)
    if number in _TRANSLATED:
        return is_public(str(IPv4Address(int(number) & 0xFFFF_FFFF)))
    is_given_out = number in _GIVEN_OUT and not any(number in network for network in _SPECIAL_IN_IT)
    return is_given_out and number.scope_id is None


def _literal(host: str) -> str | None:
    """
    The numeric address that a host is, None for a name.

    Raises:
        UnfitAddress: It is neither in the one form that is taken.
    """
    if host.startswith("["):
        try:
            return str(IPv6Address(host[1:-1]))
        except ValueError:
            raise UnfitAddress(f"must have a host; {host} is no address of version 6") from None
    labels = host.split(".")
    if _NUMBER.fullmatch(labels[-1]):
        try:
            return str(IPv4Address(host))
        except ValueError:
            raise UnfitAddress(f"must write an address of version 4 as four decimal numbers; received {host}") from None
    if len(host) > LONGEST_HOST or not all(map(_LABEL.fullmatch, labels)):
        raise UnfitAddress(f"must have a host; {host} is no name of one")
    return None


def _is_local_name(host: str) -> bool:
    """True for names that mean this machine everywhere (RFC 6761)."""
    return host == "localhost" or host.endswith(".localhost")
