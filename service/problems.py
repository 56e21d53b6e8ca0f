"""Refusals as clients see them: one RFC 9457 body for every error.

A `Problem` knows its kind; the kind knows status, title and the way out, and the body says
all three. Handlers find it by class, `/problems/{kind}` explains it. A body never holds the
text of an unexpected exception.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import orjson

from scoring.errors import OddbranchError

PROBLEM_MEDIA_TYPE = "application/problem+json"


@dataclass(frozen=True, slots=True)
class Kind:
    """A sort of refusal: its HTTP status, its title and what the client can do."""

    status: int
    title: str
    way_out: str


KINDS: Mapping[str, Kind] = {
    "bad-json": Kind(400, "Body is not JSON", "Send UTF-8 JSON: one object, an array, or NDJSON."),
    "bad-encoding": Kind(400, "Body cannot be unpacked", "Check that the body is whole gzip data."),
    "bad-header": Kind(400, "Header cannot be used", "Correct the header that the detail names."),
    "bad-record": Kind(422, "Record cannot be used", "Correct the member that the detail names."),
    "bad-query": Kind(422, "Query cannot be used", "Correct the parameter that the detail names."),
    "bad-action": Kind(422, "Action cannot be used", "Correct the member that the detail names."),
    "impossible-action": Kind(
        409, "Action is not possible now", "Look at GET /alerts for how things stand."
    ),
    "conflict": Kind(
        409,
        "Another record stands there",
        "A record of this source and time is stored with other readings; the first one stands. "
        "Give each record its own time.",
    ),
    "too-many-sources": Kind(
        403,
        "Too many sources",
        "Check the spelling of the source, or let an operator raise limits.n_sources.",
    ),
    "no-token": Kind(
        401,
        "A token is needed",
        "Send 'Authorization: Bearer TOKEN'; an operator makes one with `oddbranch token add`.",
    ),
    "no-right": Kind(
        403,
        "Token may not do this",
        "Ask an operator for a token with that role: `oddbranch token add NAME --role ROLE`.",
    ),
    "foreign-origin": Kind(
        403,
        "Request from a foreign page",
        "Pages of other origins may not call this service; call it from a program.",
    ),
    "bad-host": Kind(
        400,
        "Host is not served here",
        "Use a name listed in server.hosts, or let an operator add this one.",
    ),
    "not-found": Kind(
        404, "Nothing is there", "Look at /openapi.json for what this service answers."
    ),
    "bad-method": Kind(405, "Method is not for this path", "Use a method named in Allow."),
    "slow-body": Kind(408, "Body came too slowly", "Send the body again without pauses."),
    "too-large": Kind(
        413,
        "Body is too large",
        "Send smaller batches, or stream lines as application/x-ndjson.",
    ),
    "bad-media-type": Kind(
        415,
        "Media type is not taken",
        "Set Content-Type to application/json or application/x-ndjson, "
        "and Content-Encoding to gzip or to nothing.",
    ),
    "overload": Kind(503, "More than can be taken now", "Send it again after Retry-After seconds."),
    "store-full": Kind(
        503,
        "Store is full",
        "Nothing was stored; records stored before are safe. An operator must free disk space; "
        "send it again later.",
    ),
    "answers-full": Kind(
        503,
        "No room for answers",
        "Read answers while you send, or send fewer lines at once; send the lines from `index` on "
        "again. An operator must free disk space where temporary files go (TMPDIR).",
    ),
    "store-away": Kind(
        503,
        "Store cannot be reached",
        "Nothing was acknowledged; send it again after Retry-After seconds.",
    ),
    "not-ready": Kind(503, "Not ready", "Wait until /health/ready answers 200."),
    "internal": Kind(
        500,
        "Unexpected fault",
        "Tell an operator the request id; the log of the service has the rest.",
    ),
}

# Seconds that a client should wait after each of these, sent as Retry-After.
RETRY_AFTER_S: Mapping[str, int] = {
    "overload": 1,
    "store-full": 60,
    "answers-full": 60,
    "store-away": 5,
    "not-ready": 2,
}


class Problem(OddbranchError):
    """A refusal of one request or of one item in a batch.

    kind: a key of KINDS. detail: one sentence for this case. Further members go into the
    body as they are, for example `pointer`, the place in the body.
    """

    def __init__(self, kind: str, detail: str, **members: str | int) -> None:
        self.kind, self.detail, self.members = kind, detail, members
        super().__init__(detail)

    @property
    def status(self) -> int:
        """HTTP status of the refusal."""
        return KINDS[self.kind].status

    def as_dict(self) -> dict[str, str | int]:
        """Return the RFC 9457 object."""
        kind = KINDS[self.kind]
        return {
            "type": f"/problems/{self.kind}",
            "title": kind.title,
            "status": kind.status,
            "detail": self.detail,
            "way_out": kind.way_out,
            **self.members,
        }

    def as_item(self, index: int) -> dict[str, object]:
        """Return what stands in a batch answer in place of a record's scores."""
        return {"index": index, "problem": {**self.as_dict(), "index": index}}

    def as_bytes(self) -> bytes:
        """Return the RFC 9457 object as JSON."""
        return orjson.dumps(self.as_dict())

    def headers(self) -> dict[str, str]:
        """Return the headers that belong to this refusal."""
        headers = {"content-type": PROBLEM_MEDIA_TYPE, "cache-control": "no-store"}
        if self.kind in RETRY_AFTER_S:
            headers["retry-after"] = str(RETRY_AFTER_S[self.kind])
        if self.kind == "no-token":
            # Basic lets a browser open the page with the token as the password.
            headers["www-authenticate"] = 'Bearer realm="oddbranch", Basic realm="oddbranch"'
        return headers
