"""IPv4 addresses of gateways and of the server that they send to."""

from ipaddress import IPv4Network, ip_network

from pcaptool.profile import Profile

ELSEWHERE = ip_network("198.18.0.0/15")         # RFC 2544, for measurements


def home(profile: Profile) -> IPv4Network | None:
    """Return the profile's first IPv4 network, a private one when it names none; None when all are IPv6."""
    nets = [ip_network(text) for text in profile.carrier.net] or [ip_network("10.61.0.0/16")]
    return next((net for net in nets if isinstance(net, IPv4Network)), None)


def server_address(profile: Profile) -> int:
    """Return the server's address as a number: the first of the network."""
    net = home(profile)
    assert net is not None, "the plan was not checked"
    return int(net.network_address) + (net.num_addresses > 2)


def gateway_address(profile: Profile, gateway: int) -> int:
    """Return a gateway's address as a number: in the network when it is large enough."""
    net = home(profile)
    assert net is not None, "the plan was not checked"
    place = 10 + gateway
    if place < net.num_addresses - 1:
        return int(net.network_address) + place
    return int(ELSEWHERE.network_address) + place
