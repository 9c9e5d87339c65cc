"""Requests that no service should take: drawn at random, complete on the wire, each wrong in its own way."""

from __future__ import annotations

import json
import random
from collections.abc import Callable

__all__ = ["malformed_request"]

BODIES = {
    "/v1/decisions": {"itinerary": "IN0", "fare": 100.0, "fare_class": "Y", "seats": 1},
    "/v1/decisions/batch": {"itinerary": ["IN0"], "fare": [100.0], "seats": [1], "sentences": True},
    "/v1/sales": {"legs": ["IN0"], "fare": 100.0, "seats": 1, "at_any_price": False},
    "/v1/sales/nobody/cancellations": {"seats": 1},
    "/v1/seat-counts": {"why": "drill", "counts": [{"leg": "IN0", "capacity": 20, "sold": 0}]},
}
LISTS = {"legs", "counts", "itinerary"}
WRONG = [
    *(
        "null",
        "true",
        '"one"',
        '""',
        "-1",
        "0.5",
        "1e999",
        "-1e999",
        "NaN",
        "Infinity",
        "-Infinity",
        "[]",
        "{}",
        "[[]]",
    ),
    *('{"$ref": "#"}', "99999999999999999999", "9" * 6_000, '"\\ud800"', '"' + "x" * 300 + '"', '"1"', "[null]"),
    *('["\\u0000", 1]', "1e-999999999999", '{"a": {"b": [1, 2, {"c": null}]}}', "-0", "0x10", "01", "1_000", "'1'"),
]
NAMES = [
    "a b",
    "\0",
    "\x7f",
    "\u202e",
    "é" * 150,
    "💺" * 60,
    "\ufeff",
    "../../etc",
    "<script>",
    "'; --",
    "%00",
    "nowhere",
]


def _head(method: str, path: str, headers: list[tuple[str, str]], body: bytes) -> bytes:
    lines = [f"{method} {path} HTTP/1.1", "Host: 127.0.0.1", *(f"{name}: {value}" for name, value in headers)]
    return "\r\n".join([*lines, f"Content-Length: {len(body)}", "", ""]).encode("latin-1", "replace") + body


def _send(draw: random.Random, path: str, body: bytes, token: str, kind: str = "application/json") -> bytes:
    method = "PUT" if path.endswith("seat-counts") else "POST"
    key = f"malformed-{draw.random()}"
    headers = [("Authorization", f"Bearer {token}"), ("Idempotency-Key", key), ("Content-Type", kind)]
    return _head(method, path, headers, body)


def _broken_text(draw: random.Random, token: str) -> bytes:
    path = draw.choice(list(BODIES))
    text = json.dumps(BODIES[path]).encode()
    place = draw.randrange(1, len(text) - 1)
    broken = draw.choice(
        [
            text[:place],
            text + text,
            text[:-1] + b",}",
            b"\xef\xbb\xbf\xff" + text,
            bytes(draw.randrange(256) for _ in range(draw.randrange(40))) + b"\xff",
            text.replace(b'"', b"'"),
            text.decode().encode("utf-16"),
            b"",
        ]
    )
    return _send(draw, path, broken, token)


def _wrong_value(draw: random.Random, token: str) -> bytes:
    path = draw.choice(list(BODIES))
    fields = dict(BODIES[path])
    name = draw.choice(list(fields))
    # None is as good as nothing for some fields, and an unknown name is refused without being malformed.
    words = [word for word in WRONG if word != "null" or name in LISTS | {"why", "at_any_price", "sentences"}]
    word = draw.choice([word for word in words if not (word == "true" and isinstance(fields[name], bool))])
    if name in {"fare_class", "why"}:
        word = draw.choice(["1", "[]", "{}", "true", '""', '"\\ud800"', '"' + "x" * 2_000 + '"'])
    if name == "fare" and word in {"0.5", "-0", "1e-999999999999", "[null]"}:
        word = "-1"
    text = json.dumps({**fields, name: "@@"}).replace('"@@"', word)
    return _send(draw, path, text.encode("utf-8", "surrogatepass"), token)


def _strange_fields(draw: random.Random, token: str) -> bytes:
    path = draw.choice(list(BODIES))
    fields = {**BODIES[path], draw.choice([*NAMES, "__proto__", "Seats", ""]): draw.choice([1, None, "x", [], {}])}
    whole = draw.choice([fields, [BODIES[path]], "text", 7, None, True])
    return _send(draw, path, json.dumps(whole).encode(), token)


def _strange_names(draw: random.Random, token: str) -> bytes:
    name = draw.choice(NAMES)
    bodies = [{"itinerary": name, "fare": 1.0}, {"legs": ["IN0", name], "fare": 1.0}, {"legs": [name] * 2, "fare": 1.0}]
    path = draw.choice(["/v1/decisions", "/v1/sales"])
    text = json.dumps(draw.choice(bodies), ensure_ascii=draw.random() < 0.5)
    return _send(draw, path, text.encode("utf-8", "surrogatepass"), token)


def _deep(draw: random.Random, token: str) -> bytes:
    path, depth = draw.choice(list(BODIES)), draw.choice([200, 3_000, 20_000])
    opening, closing = draw.choice([("[", "]"), ('{"itinerary":', "}")])
    return _send(draw, path, (opening * depth + "1" + closing * depth).encode(), token)


def _wrong_kind(draw: random.Random, token: str) -> bytes:
    path = draw.choice(list(BODIES))
    kinds = [
        "text/plain",
        "application/xml",
        "multipart/form-data; boundary=x",
        "application/jsonp",
        "json",
        "",
        "\xff",
    ]
    return _send(draw, path, json.dumps(BODIES[path]).encode(), token, draw.choice(kinds))


def _wrong_key(draw: random.Random, token: str) -> bytes:
    path = draw.choice(["/v1/sales", "/v1/sales/nobody/cancellations"])
    headers = [("Authorization", f"Bearer {token}"), ("Content-Type", "application/json")]
    key = draw.choice([None, "", "a b", "x" * 201, "\xe9", "\t", "key\x80"])
    headers += [] if key is None else [("Idempotency-Key", key)]
    return _head("POST", path, headers, json.dumps(BODIES[path]).encode())


def _wrong_token(draw: random.Random, token: str) -> bytes:
    path = draw.choice(["/v1/sales", "/v1/sales/nobody/cancellations", "/v1/seat-counts"])
    method = "PUT" if path.endswith("counts") else "POST"
    value = draw.choice(
        [token[:-1], "", f"Bearer {token[::-1]}", f"Basic {token}", "Bearer \xff", "x" * 5_000, "Bearer"]
    )
    headers = [("Authorization", value), ("Idempotency-Key", "k"), ("Content-Type", "application/json")]
    return _head(method, path, headers, json.dumps(BODIES[path]).encode())


def _wrong_method(draw: random.Random, _token: str) -> bytes:
    path = draw.choice([*BODIES, "/v1/health", "/v1/nights", "/v1/legs/IN0"])
    taken = {"/v1/health": "GET", "/v1/nights": "GET", "/v1/legs/IN0": "GET", "/v1/seat-counts": "PUT"}
    methods = {"GET", "PUT", "POST", "DELETE", "PATCH", "OPTIONS", "TRACE", "PROPFIND"} - {taken.get(path, "POST")}
    return _head(draw.choice(sorted(methods)), path, [], b"")


def _wrong_path(draw: random.Random, _token: str) -> bytes:
    rooms = ["legs", "itineraries", "nights", "sales", "", "..", "decisions"]
    rest = [
        "x" * draw.randrange(1, 20_000),
        "%00",
        "%ff%fe",
        "%zz",
        "a/b/c",
        "%F0%9F%92%BA",
        "/" * 500,
        "?a=" + "b" * 9_000,
    ]
    return _head("GET", f"/v1/{draw.choice(rooms)}/{draw.choice(rest)}", [], b"")


def _no_http(draw: random.Random, _token: str) -> bytes:
    return draw.choice(
        [
            b"GET /v1/health HTTP/9.9\r\n\r\n",
            b"G\x00T / HTTP/1.1\r\n\r\n",
            b"GET  HTTP/1.1\r\n\r\n",
            b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03\r\n\r\n",
            b"GET /v1/health HTTP/1.1\r\nNo colon here\r\n\r\n",
            b"GET /v1/health HTTP/1.1\r\nX: \x00\r\n\r\n",
            b"GET /\xff\xfe HTTP/1.1\r\nHost: x\r\n\r\n",
            b"POST /v1/sales HTTP/1.1\r\nContent-Length: ten\r\n\r\n",
            b"POST /v1/sales HTTP/1.1\r\nContent-Length: -1\r\n\r\n",
            b"POST /v1/sales HTTP/1.1\r\nContent-Length: 1\r\nContent-Length: 2\r\n\r\nx",
            b"POST /v1/sales HTTP/1.1\r\nContent-Length: 1\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
            b"POST /v1/sales HTTP/1.1\r\nContent-Length: " + b"9" * draw.choice([12, 19, 30, 5_000]) + b"\r\n\r\n",
            b"POST /v1/decisions HTTP/1.1\r\nContent-Type: application/json\r\n"
            b"Transfer-Encoding: chunked\r\n\r\nnothing\r\n\r\n",
            b"GET /v1/legs/x HTTP/1.1\r\n" + b"".join(b"X-%d: y\r\n" % number for number in range(6_000)) + b"\r\n",
            b"GET /v1/legs/x HTTP/1.1\r\nX: " + b"y" * 40_000 + b"\r\n\r\n",
            b"GET /v1/" + b"z" * 40_000 + b" HTTP/1.1\r\n\r\n",
        ]
    )


WAYS: list[Callable[[random.Random, str], bytes]] = [
    *(_broken_text, _wrong_value, _wrong_value, _strange_fields, _strange_names, _deep, _wrong_kind),
    *(_wrong_key, _wrong_token, _wrong_method, _wrong_path, _no_http),
]


def malformed_request(draw: random.Random, token: str) -> bytes:
    """Draw one request; the token is a good one."""
    return draw.choice(WAYS)(draw, token)
