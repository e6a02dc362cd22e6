"""CloudEvents 1.0.2 (CNCF) in the JSON format: the attribute rules, the batch rules and the examples of its documents.

Sources: the specification ("spec" below), its JSON format and its HTTP protocol binding, versions 1.0.2; the format's
JSON schema (`cloudevents/formats/cloudevents.json`); RFC 3986 for the two URI types. Where the specification leaves
room, `ingest.cloudevents` says what was decided.
"""

from __future__ import annotations

import json

import pytest
from helpers_arrival import check_arrival, plain
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.encodings import media_type_of

ONE, BATCH = "application/cloudevents+json", "application/cloudevents-batch+json"
FEED = Decoder("river", "/time", "rfc3339", "/source", "/id")
TIME = 1_522_949_460_000_000_000  # 2018-04-05T17:31:00Z, computed with date -u

# JSON format 3.2, the attributes that its examples share
ATTRIBUTES = {
    "specversion": "1.0",
    "type": "com.example.someevent",
    "source": "/mycontext",
    "id": "A234-1234-1234",
    "time": "2018-04-05T17:31:00Z",
    "comexampleextension1": "value",
    "comexampleothervalue": 5,
}


def decoded(body, media_type=ONE, decoder=FEED):
    arrival = decoder.decode(body, media_type, {})
    check_arrival(arrival, {})
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, media_type, {}))
    return arrival


def one(**changes):
    """The example with members put in, or taken away where they are ..."""
    members = {name: value for name, value in {**ATTRIBUTES, **changes}.items() if value is not ...}
    return decoded(json.dumps(members).encode())


def reason(arrival):
    (fault,) = arrival.faults
    assert not len(arrival.times)
    return fault.reason, fault.detail


# ---- examples that must be accepted (JSON format 3.2 and 4.3) --------------------------------------------------------

EXAMPLES = {
    "binary": {"datacontenttype": "application/vnd.apache.thrift.binary", "data_base64": "Zm9vYmFy"},
    "text": {"datacontenttype": "application/xml", "data": '<much wow="xml"/>'},
    "object": {
        "subject": None,
        "datacontenttype": "application/json",
        "data": {"appinfoA": "abc", "appinfoB": 123, "appinfoC": True},
    },
    "a string without a content type": {"data": "some text, no JSON: {"},
}


@pytest.mark.parametrize("members", EXAMPLES.values(), ids=EXAMPLES)
def test_examples(members):
    body = json.dumps({**ATTRIBUTES, **members}, indent=4).encode()
    arrival = decoded(body)
    assert (arrival.times.tolist(), arrival.new_sources, arrival.faults) == ([TIME], ["/mycontext"], ())
    assert arrival.payload == body.replace(b"\n", b" ") + b"\n"  # passed on with its own bytes


def test_the_example_of_a_batch():
    first = {**ATTRIBUTES, "source": "/mycontext/4", "id": "B234-1234-1234", "data_base64": "Zm9vYmFy"}
    second = {**ATTRIBUTES, "source": "/mycontext/9", "id": "C234-1234-1234", "time": "2018-04-05T17:31:05Z"}
    second |= {"datacontenttype": "application/json", "data": {"appinfoA": "abc", "appinfoB": 123, "appinfoC": True}}
    arrival = decoded(json.dumps([first, second], indent=2).encode(), BATCH)
    assert arrival.times.tolist() == [TIME, TIME + 5 * 10**9]
    assert (arrival.new_sources, arrival.faults) == (["/mycontext/4", "/mycontext/9"], ())


def test_an_empty_batch_is_valid():
    """JSON format 4: "a batch may contain zero events"."""
    assert decoded(b"[]", BATCH).received == 0


# Examples of sources: spec, "source"
@pytest.mark.parametrize(
    "source",
    [
        "https://github.com/cloudevents",
        "mailto:cncf-wg-serverless@lists.cncf.io",
        "urn:uuid:6e8bc430-9c3a-11d9-9669-0800200c9a66",
        "cloudevents/spec/pull/123",
        "/sensors/tn-1234567/alerts",
        "1-555-123-4567",
        # RFC 3986 section 1.1.2
        "ftp://ftp.is.co.za/rfc/rfc1808.txt",
        "http://www.ietf.org/rfc/rfc2396.txt",
        "ldap://[2001:db8::7]/c=GB?objectClass?one",
        "news:comp.infosystems.www.servers.unix",
        "tel:+1-816-555-1212",
        "telnet://192.0.2.16:80/",
        "urn:oasis:names:specification:docbook:dtd:xml:4.1.2",
        # RFC 3986 section 5.4, relative references
        "g;x?y#s", "?y", "#s", "//g", "../..", "./g:h", ";x", "http:g", "g?y/./x", "g#s/../x", "%41",
    ],
)  # fmt: skip
def test_sources_that_are_uri_references(source):
    arrival = one(source=source)
    assert (arrival.new_sources, arrival.faults) == ([source], ())


@pytest.mark.parametrize(
    "source", ["a b", "1a:b", "%4", "%zz", "a\\b", "http://[::1", "http://a[b]/", "[", "a#b#c", "ö", "<x>", "a|b", "^"]
)
def test_sources_that_are_none(source):
    assert reason(one(source=source)) == ("cloudevent_invalid", reason(one(source=source))[1])
    assert "source" in reason(one(source=source))[1]


# ---- attributes -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["id", "source", "specversion", "type"])
@pytest.mark.parametrize("value", [..., None, "", 7, True, ["x"], {"x": 1}, 1.5])
def test_required_attributes_are_strings_that_say_something(name, value):
    feed = Decoder("river", "/time", "rfc3339")  # so that the feed's own pointers do not judge them first
    members = {key: item for key, item in {**ATTRIBUTES, name: value}.items() if item is not ...}
    (fault,) = decoded(json.dumps(members).encode(), decoder=feed).faults
    assert fault.reason == "cloudevent_invalid"
    assert name in fault.detail


def test_the_feeds_own_law_comes_first():
    assert reason(one(id=...))[0] == "id_missing"
    assert reason(one(source=None, type=...))[0] == "source_missing"
    assert reason(one(time="yesterday", type=...))[0] == "time_invalid"
    assert reason(one(time="2018-02-30T00:00:00Z", type=...))[0] == "time_invalid"
    assert reason(one(time=...))[0] == "time_missing"


@pytest.mark.parametrize("version", ["0.3", "1.1", "1", "1.0.2", " 1.0"])
def test_other_versions_are_not_known(version):
    assert "only 1.0" in reason(one(specversion=version))[1]


@pytest.mark.parametrize("name", ["subject", "time", "dataschema", "datacontenttype", "comexampleextension1"])
def test_null_is_absent(name):
    """JSON format 2.2; the JSON schema allows null for every optional attribute."""
    feed = Decoder("river", "/otime", "rfc3339")
    members = {**ATTRIBUTES, "otime": "2018-04-05T17:31:00Z", name: None}
    assert decoded(json.dumps(members).encode(), decoder=feed).times.tolist() == [TIME]


@pytest.mark.parametrize(
    "changes",
    [
        {"subject": ""}, {"subject": 5}, {"subject": False},
        {"dataschema": ""}, {"dataschema": "/relative"}, {"dataschema": "no uri"}, {"dataschema": 1},
        {"datacontenttype": ""}, {"datacontenttype": "json"}, {"datacontenttype": "a/b; c"}, {"datacontenttype": "ä/b"},
        {"Upper": "x"}, {"with-dash": "x"}, {"with_underscore": "x"}, {"": "x"}, {"ö": "x"}, {"a b": 1}, {"data2!": 1},
        {"ext": 1.5}, {"ext": [1]}, {"ext": {"a": 1}}, {"ext": 2**31}, {"ext": -(2**31) - 1}, {"ext": 10**400},
        {"data": 1, "data_base64": "eA=="}, {"data": None, "data_base64": "eA=="}, {"data": "", "data_base64": ""},
        {"data_base64": "e"}, {"data_base64": "e==="}, {"data_base64": "e$=="}, {"data_base64": 5}, {"data_base64": {}},
        {"data_base64": "eA==\n"}, {"data_base64": True},
    ],
)  # fmt: skip
def test_what_breaks_a_rule(changes):
    found, detail = reason(one(**changes))
    assert found == "cloudevent_invalid"
    assert any(json.dumps(name)[1:-1] in detail for name in changes)


@pytest.mark.parametrize(
    "changes",
    [
        {"subject": "mynewfile.jpg"},
        {"dataschema": "https://example.org/schema"}, {"dataschema": "urn:a:b"},
        {"datacontenttype": "text/xml; charset=utf-8"}, {"datacontenttype": 'multipart/form-data; boundary="a b"'},
        {"ext": ""}, {"ext": True}, {"ext": 2**31 - 1}, {"ext": -(2**31)}, {"ext": "2018"}, {"0": 0}, {"a" * 40: 1},
        {"data": None}, {"data": 1e300}, {"data": []}, {"data": "", "data_base64": None}, {"data_base64": None},
        {"data_base64": ""}, {"data_base64": "eA=="}, {"data_base64": "+/+/"}, {"data": {"Any Name": {"x": [1.5]}}},
        {"time": "2018-04-05t17:31:00z"}, {"time": "2018-04-05T19:31:00+02:00"},
    ],
)  # fmt: skip
def test_what_breaks_none(changes):
    assert not one(**changes).faults


def test_a_time_that_only_the_feed_does_not_use_is_judged_too():
    feed = Decoder("river", "/recordedtime", "rfc3339")
    for time, good in [
        ("0001-01-01T00:00:00Z", True),  # beyond int64 nanoseconds, and a timestamp all the same
        ("1998-12-31T23:59:60Z", True),
        ("1998-12-31T23:59:61Z", False),
        ("2018-04-05T17:31:00Z[Europe/Paris]", False),  # RFC 9557 suffixes are not RFC 3339
        ("2018-04-05 17:31:00Z", False),
    ]:
        event = {**ATTRIBUTES, "recordedtime": "2018-04-05T17:31:00Z", "time": time}
        arrival = decoded(json.dumps(event).encode(), decoder=feed)
        assert (len(arrival.times) == 1) == good
        assert good or "time" in reason(arrival)[1]


# spec, type system: String: no U+0000-001F, U+007F-009F, noncharacters, surrogates
@pytest.mark.parametrize("name", ["id", "type", "subject", "comexampleextension1"])
@pytest.mark.parametrize(
    ("escape", "good"),
    [("\\u0000", False), ("\\u001f", False), ("\\u007f", False), ("\\u0080", False), ("\\u009f", False),
     ("\\ufdd0", False), ("\\ufdef", False), ("\\ufffe", False), ("\\uffff", False), ("\\ud83f\\udfff", False),
     ("\\udbff\\udffe", False), ("\\u0020", True), ("\\u007e", True), ("\\u00a0", True), ("\\ufdcf", True),
     ("\\ufdf0", True), ("\\ufffd", True), ("\\uD800\\uDEAD", True), ("\\ue000", True), ("€😀", True)],
)  # fmt: skip
def test_characters_of_strings(name, escape, good):
    members = {**ATTRIBUTES, "subject": "x", name: "@"}
    arrival = decoded(json.dumps(members).replace('"@"', f'"x{escape}"').encode())
    assert (len(arrival.times) == 1) == good
    if not good:
        assert arrival.faults[0].reason == "cloudevent_invalid"


def test_a_half_of_a_surrogate_pair_is_no_string():
    for name in ("type", "comexampleextension1"):
        body = json.dumps({**ATTRIBUTES, name: "@"}).replace('"@"', '"\\uDEAD"').encode()
        with pytest.raises(BodyError, match="not one JSON object at byte"):
            decoded(body)


# ---- batches --------------------------------------------------------------------------------------------------------


def test_a_faulty_event_of_a_batch_hinders_no_other():
    events = [{**ATTRIBUTES, "id": str(number)} for number in range(5)]
    del events[1]["type"]
    events[3]["specversion"] = "0.3"  # all members of a batch have one specversion, and 1.0 is the one that is taken
    arrival = decoded(json.dumps(events).encode(), BATCH)
    assert [(fault.line, fault.reason) for fault in arrival.faults] == [
        (2, "cloudevent_invalid"),
        (4, "cloudevent_invalid"),
    ]
    assert len(arrival.times) == 3


@pytest.mark.parametrize(
    ("body", "media_type", "words"),
    [
        (b"{}", BATCH, "not a JSON array at byte 0: it begins one JSON object"),
        (b" [{}]", ONE, "not one JSON object at byte 1: it begins a JSON array"),
        (b"null", ONE, "begins neither"),
        (b"5", BATCH, "begins neither"),
        (b"[{]", BATCH, "not a JSON array at byte 2"),
    ],
)
def test_what_is_neither_an_event_nor_a_batch(body, media_type, words):
    with pytest.raises(BodyError, match=words) as caught:
        FEED.decode(body, media_type, {})
    assert caught.value.status == 422


def test_anything_but_objects_in_a_batch():
    arrival = decoded(b'[1, null, [], "x", {}]', BATCH)
    assert [fault.reason for fault in arrival.faults] == ["malformed"] * 4 + ["time_missing"]


# ---- the mode of a request (HTTP binding 3) -------------------------------------------------------------------------


@pytest.mark.parametrize("parameters", ["", "; charset=utf-8", ";charset=UTF-8"])
def test_the_mode_is_told_by_the_media_type(parameters):
    """`application/cloudevents-batch` begins like `application/cloudevents`: neither may be taken for the other."""
    assert media_type_of(BATCH + parameters) == BATCH
    assert media_type_of(ONE.upper() + parameters) == ONE
    for media_type in ("application/cloudevents", "application/cloudevents-batch", "application/cloudevents+avro"):
        with pytest.raises(BodyError) as caught:
            media_type_of(media_type + parameters)
        assert (caught.value.status, caught.value.accept_encoding) == (415, None)


@pytest.mark.parametrize("name", ["ce-specversion", "ce-id", "ce-source", "ce-type"])
@pytest.mark.parametrize("media_type", ["application/json", "application/x-ndjson", "text/plain", None])
def test_binary_mode_is_not_offered(name, media_type):
    with pytest.raises(BodyError, match="binary mode") as caught:
        media_type_of(media_type, {name: "x"})
    assert caught.value.status == 415
    assert media_type_of(ONE, {name: "1.0"}) == ONE, "a structured event may repeat attributes in the header"


def test_a_body_of_64_kilobytes_is_taken():
    """spec, "Size Limits": consumers should accept events of at least 64 KByte."""
    assert not one(data="x" * 64 * 1024).faults
