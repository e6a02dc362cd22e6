"""Who may do what: the law over roles, feeds and addresses; tokens, hosts, origins; hostile input."""

from __future__ import annotations

import itertools
from pathlib import Path

import pytest
from helpers_access import routes_of, token_of
from helpers_service import configuration, running
from hypothesis import given
from hypothesis import strategies as st
from strandline.access import (
    EVERY,
    EXPIRED,
    LOOPBACK_HOSTS,
    NO_TOKEN,
    ROLES,
    RULES,
    SEVERAL,
    UNKNOWN,
    Doors,
    Rule,
    Token,
    digest_of,
    identify,
    new_token,
    permit,
    rule_of,
)
from strandline.config import parse
from strandline.config_access import Access, addresses_beyond, is_loopback, literal_beyond, needs_tokens
from strandline.errors import ConfigError
from strandline.openapi import document

FEEDS = ("river", "sea")


def expected(method: str, path: str) -> Rule:
    """The law, in words of its own: what an address needs by what it looks like."""
    if not path.startswith(("/v1/", "/metrics")):
        return Rule(None)
    scope = "feed" if "{feed}" in path else "some" if path in ("/v1/feeds", "/v1/cluster") else "every"
    if method in ("GET", "HEAD"):
        return Rule("read", scope)
    return Rule("ingest" if path.endswith(("/events", "/marks")) else "operate", scope)


async def test_every_route_of_the_service_has_the_rule_of_the_law(tmp_path: Path) -> None:
    """A new route without a rule fails here."""
    async with running(configuration(tmp_path)) as service:
        assert service.service._runner is not None
        routes = routes_of(service.service._runner.app)
    assert len(routes) > 30
    for method, path in routes:
        assert rule_of(method, path) is not None, f"{method} {path} has no rule in strandline.access.RULES"
        assert rule_of(method, path) == expected(method, path), (method, path)
    assert {*RULES} <= {*routes}, "a rule for what there is not"


@pytest.mark.parametrize("role", ROLES)
@pytest.mark.parametrize("granted", [*FEEDS, EVERY])
def test_the_law_of_roles_and_feeds(role: str, granted: str) -> None:
    """A token does what its role is for, in its feeds, and nothing else, over every address there is."""
    _, token = token_of(**{role: [granted]})
    for (method, path), feed in itertools.product(RULES, FEEDS):
        needed = expected(method, path)
        good = needed.role is None or (
            needed.role == role
            and {"feed": granted in (feed, EVERY), "some": True, "every": granted == EVERY}[needed.scope]
        )
        denied = permit(token, rule_of(method, path), feed)
        assert (denied is None) == good, (method, path, feed)
        if denied is not None:
            # RFC 6750, 3.1: insufficient_scope is 403, and may say which scope is needed.
            assert denied.status == 403
            assert 'error="insufficient_scope"' in denied.challenge and f'scope="{needed.role}"' in denied.challenge


@pytest.mark.parametrize("role", ROLES)
def test_a_role_for_a_feed_holds_for_its_partitions_and_for_no_others(role: str) -> None:
    partitions = {"river": ["river-0", "river-1"], "river-1x": ["river-1x-0"], "sea": []}
    _, granted = token_of(**{role: ["river"]})
    token = granted.with_partitions(partitions)
    allowed = {
        (each, name)
        for each in ROLES
        for name in ("river", "river-0", "river-1", "river-2", "river-1x", "river-1x-0", "sea", "sea-0", EVERY)
        if token.may(each, name)
    }
    assert allowed == {(role, name) for name in ("river", "river-0", "river-1")}
    assert token.may_some(role) and (token.name, token.digest) == (granted.name, granted.digest)
    _, every = token_of(**{role: [EVERY]})
    assert every.with_partitions(partitions).may(role, EVERY)
    _, none = token_of()
    assert not none.with_partitions(partitions).may_some(role)


def test_what_has_no_rule_is_for_nobody() -> None:
    _, token = token_of(**dict.fromkeys(ROLES, ("*",)))
    assert rule_of("DELETE", "/v1/feeds/{feed}") is None
    denied = permit(token, None, "river")
    assert denied is not None and denied.status == 403


def test_the_document_of_the_addresses_says_which_role_each_needs() -> None:
    """OpenAPI 3.1, security requirement object: a list of roles beside the scheme; {} where it may also be left out."""
    made = document()
    assert made["components"]["securitySchemes"]["token"]["scheme"] == "bearer"
    for path, operations in made["paths"].items():
        for method, operation in operations.items():
            role = expected(method.upper(), path).role
            assert operation["security"] == ([] if role is None else [{"token": [role]}, {}]), (method, path)
            refusals = {"400", "421"} | (set() if role is None else {"401", "403"})
            assert refusals <= {*operation["responses"]}, (method, path)


# --- tokens ------------------------------------------------------------------------------------------------------


def test_a_token_has_256_random_bits_in_characters_that_need_no_quoting() -> None:
    """base64url (RFC 4648, 5) of 32 bytes is 43 characters without padding; RFC 6750, 2.1 lets them all stand."""
    made = {new_token() for _ in range(100)}
    assert len(made) == 100
    assert all(len(each) == len("strandline_") + 43 and each.isascii() for each in made)


def test_sha_256_is_what_is_kept() -> None:
    """FIPS 180-4's own example: "abc"."""
    assert digest_of("abc").hex() == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_the_right_token_is_found_among_many_and_no_other() -> None:
    made = [token_of(f"t{number}") for number in range(50)]
    tokens = [entry for _, entry in made]
    for text, entry in made:
        for scheme in ("Bearer", "bearer", "BEARER"):  # RFC 9110, 11.1: case-insensitive
            assert identify(tokens, [f"{scheme} {text}"], 0) is entry
    assert identify(tokens, [f"Bearer {new_token()}"], 0) is UNKNOWN
    assert identify(tokens, [], 0) is NO_TOKEN
    assert identify(tokens, [f"Bearer {made[0][0]}"] * 2, 0) is SEVERAL


class _Watched(bytes):
    """A hash that must not be compared by ==, whose time tells how much of it is right."""

    __hash__ = bytes.__hash__

    def __eq__(self, other: object) -> bool:
        raise AssertionError("compared by ==")


def test_hashes_are_compared_in_constant_time() -> None:
    text, entry = token_of()
    watched = Token("w", _Watched(entry.digest), {})
    assert identify([watched, Token("x", _Watched(bytes(32)), {})], [f"Bearer {text}"], 0) is watched


def test_a_token_holds_until_it_expires() -> None:
    text, entry = token_of(expires_ns=100)
    assert identify([entry], [f"Bearer {text}"], 99) is entry
    assert identify([entry], [f"Bearer {text}"], 100) is EXPIRED


HOSTILE = [
    "", " ", "Bearer", "Bearer ", "Bearer \0", "Basic dXNlcjpwYXNz", "Bearer strandline_", "Bearer " + "a" * 1_000_000,
    "Bearer strandline_" + "\udcff" * 43, "Bearer strandline_" + "é" * 43, "Bearer\tstrandline_" + "a" * 43,
    "Bearer " * 2 + "strandline_" + "a" * 43, "Bearer strandline_" + "a" * 42, "Bearer strandline_" + "a" * 44,
    " " * 100_000 + "x", "Bearer " + " " * 100_000, "Bearer strandline_" + "a" * 43 + "\n", "ＢＥＡＲＥＲ x",
]  # fmt: skip


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_what_is_no_token_is_unknown(text: str) -> None:
    assert identify([token_of()[1]], [text], 0) is UNKNOWN


@given(st.lists(st.text(st.characters()) | st.builds("Bearer {}".format, st.text(st.characters())), min_size=1))
def test_whatever_the_headers_hold_nobody_is_let_in(headers: list[str]) -> None:
    assert identify([token_of()[1]], headers, 0) in (UNKNOWN, SEVERAL)


# --- reach -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("address", "loopback"),
    [
        ("127.0.0.1", True),
        ("127.8.9.10", True),
        ("::1", True),
        ("::ffff:127.0.0.1", True),
        ("0.0.0.0", False),
        ("::", False),
        ("192.0.2.1", False),
        ("::ffff:192.0.2.1", False),
        ("fe80::1%eth0", False),
        ("2001:db8::1", False),
    ],
)
def test_which_addresses_other_machines_can_reach(address: str, loopback: bool) -> None:
    """RFC 1122, 3.2.1.3 (127/8), RFC 4291, 2.5.3 (::1) and 2.5.5.2 (mapped addresses)."""
    assert is_loopback(address) == loopback
    refusal = needs_tokens(Access(), address, addresses_beyond([address]))
    assert bool(refusal) == (not loopback)
    for guarded in (Access(tokens=Path("t")), Access(open=True)):
        assert needs_tokens(guarded, address, addresses_beyond([address])) == ""


def test_a_name_is_not_looked_up_by_a_rule() -> None:
    assert literal_beyond("gauges.example") == [] == literal_beyond("localhost")
    assert literal_beyond("0.0.0.0") == ["0.0.0.0"]


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("[access]\nopen = 1", "access.open = 1 is neither true nor false"),
        ("[access]\nopen = true\ntokens = 't'", "access.open = true contradicts access.tokens"),
        ("[access]\nhosts = ['a b']", 'access.hosts = a list of 1 holds "a b"'),
        ("[access]\nhosts = ['a:80']", 'holds "a:80": write "strandline.example"'),
        ("[access]\norigins = ['gauges.example']", 'holds "gauges.example": write "https://strandline.example"'),
        ("[access]\norigins = ['https://a/']", 'holds "https://a/"'),
        ("[access]\ntoken = 't'", "access.token is no key of `access`"),
        ("[tls]\nkey = ''", 'tls.key = "" is no path'),
    ],
)
def test_a_fault_in_the_keys_is_named(text: str, fault: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(f"{text}\n[[feed]]\nname = 'a'\n", {}, "s.toml")
    assert any(fault in each for each in caught.value.faults), caught.value.faults


def test_variables_set_them_and_a_commands_token_is_passed_over() -> None:
    environ = {
        "STRANDLINE_ACCESS__OPEN": "true",
        "STRANDLINE_ACCESS__HOSTS": "A.example, b.example",
        "STRANDLINE_TOKEN": "x",
    }
    assert parse("[[feed]]\nname = 'a'\n", environ).access == Access(open=True, hosts=("a.example", "b.example"))


# --- hosts and pages ---------------------------------------------------------------------------------------------

LOCAL = Doors("http")


@pytest.mark.parametrize("host", ["localhost", "LOCALHOST:8600", "127.0.0.1:1", "127.0.0.1", "[::1]", "[::1]:8600"])
def test_names_of_this_machine_are_the_services_own(host: str) -> None:
    assert LOCAL.check_host([host], required=True) is None


@pytest.mark.parametrize(
    "host",
    [
        "attacker.example",
        "attacker.example:8600",
        "localhost.attacker.example",
        "127.0.0.1.attacker.example",
        "127.0.0.2",
        "0.0.0.0",
        "[::2]",
        "localhost.",
    ],
)
def test_a_name_that_leads_here_by_somebody_elses_doing_is_refused(host: str) -> None:
    """RFC 9110, 15.5.20: 421 where the server does not answer for that authority."""
    denied = LOCAL.check_host([host], required=True)
    assert denied is not None and denied.status == 421


@pytest.mark.parametrize(
    "hosts",
    [
        [],
        ["localhost", "localhost"],
        [""],
        ["a b"],
        ["local\0host"],
        ["localhost@x"],
        ["localhost:x"],
        ["x" * 1_000_000],
        ["\udcff"],
        ["localhost\n"],
        ["http://localhost"],
    ],
)
def test_what_is_no_host_is_a_bad_request(hosts: list[str]) -> None:
    """RFC 9112, 3.2: 400 for a request without one Host, or with an invalid one."""
    denied = LOCAL.check_host(hosts, required=True)
    assert denied is not None and denied.status == 400


def test_hosts_can_be_added_and_http_1_0_has_none() -> None:
    assert LOCAL.check_host([], required=False) is None
    assert Doors("http", LOOPBACK_HOSTS | {"gw.example"}).check_host(["GW.example:80"], required=True) is None
    assert Doors("http", None).check_host(["whatever.example"], required=True) is None


PAGES = [
    ("http", "localhost:8600", "http://localhost:8600", True),
    ("http", "localhost", "http://localhost:80", True),
    ("https", "gw.example:443", "https://GW.example", True),
    ("http", "localhost:8600", "https://localhost:8600", False),  # another scheme
    ("http", "localhost:8600", "http://localhost:8601", False),  # another port
    ("http", "localhost:8600", "http://127.0.0.1:8600", False),  # another host
    ("http", "localhost:8600", "http://attacker.example", False),
    ("http", "localhost:8600", "http://localhost:8600.attacker.example", False),
    ("http", "localhost:8600", "http://localhost:8600/", False),  # an origin has no path (RFC 6454, 7.1)
    ("http", "localhost:8600", "null", False),
    ("http", "localhost:8600", "", False),
    ("http", "localhost:8600", "\udcff\0", False),
    ("http", "localhost:8600", "https://proxy.example", True),  # in access.origins
]


@pytest.mark.parametrize(("scheme", "host", "origin", "good"), PAGES)
@pytest.mark.parametrize("method", ["POST", "PUT", "DELETE", "PATCH", "ANYTHING"])
def test_only_own_pages_may_act(scheme: str, host: str, origin: str, good: bool, method: str) -> None:
    doors = Doors(scheme, None, frozenset({"https://proxy.example"}))
    denied = doors.check_page(method, [origin], "", host)
    assert (denied is None) == good
    assert denied is None or denied.status == 403
    assert doors.check_page("GET", [origin], "cross-site", host) is None


@pytest.mark.parametrize(("site", "good"), [("", True), ("same-origin", True), ("none", True), ("cross-site", False),
                                            (" Cross-Site", False)])  # fmt: skip
def test_the_browsers_own_word_counts_where_there_is_no_origin(site: str, good: bool) -> None:
    assert (LOCAL.check_page("POST", [], site, "localhost") is None) == good
    assert (LOCAL.check_page("POST", ["http://localhost"], site, "localhost") is None) == good


def test_several_origins_are_nobodys() -> None:
    assert LOCAL.check_page("POST", ["http://localhost"] * 2, "", "localhost") is not None
