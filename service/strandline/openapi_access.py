"""What the OpenAPI document says about access: the scheme, the role that each operation needs, how it is refused."""

from __future__ import annotations

from typing import Any

from .access import ROLES, rule_of

Json = dict[str, Any]
SCHEME = "token"
_REFUSALS = {
    "400": "a parameter or a header is not what it should be",
    "401": "no token, one that is not known, or one that has expired",
    "403": "the token has not the role, or a page of somebody else's sent this",
    "421": "the Host header names a host that is not this service's",
}


def schemes() -> Json:
    """The part `securitySchemes`."""
    roles = ", ".join(f"{role} ({what})" for role, what in ROLES.items())
    about = (
        "RFC 6750, in the header only. `strandline token make` makes one. Asked for where the configuration names a "
        f"file of tokens. Roles, each for named feeds or for all: {roles}."
    )
    return {SCHEME: {"type": "http", "scheme": "bearer", "description": about}}


def guarded(paths: Json) -> Json:
    """The paths, each operation with what it needs and how it is refused where that is missing."""
    for path, operations in paths.items():
        for method, operation in operations.items():
            rule = rule_of(method.upper(), path)
            role = None if rule is None else rule.role
            # The empty alternative: a service without a file of tokens asks for none.
            operation["security"] = [{SCHEME: [role]}, {}] if role else []
            for status in ("400", "421") if role is None else _REFUSALS:
                operation["responses"].setdefault(status, _problem(status))
    return paths


def _problem(status: str) -> Json:
    found: Json = {
        "description": _REFUSALS[status],
        "content": {"application/problem+json": {"schema": {"$ref": "#/components/schemas/Problem"}}},
    }
    if status in ("401", "403"):
        found["headers"] = {
            "WWW-Authenticate": {
                "description": "RFC 6750, 3: the scheme, and what is wrong or which role is needed",
                "schema": {"type": "string"},
            }
        }
    return found
