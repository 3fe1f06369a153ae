"""What schemathesis does not know by itself: media types, and streams of lines."""

import functools
import json

import jsonschema_rs
import schemathesis

NDJSON = "application/x-ndjson"


@schemathesis.serializer(NDJSON)
def one_line(ctx, value):
    """A stream of one document; bytes are sent as they are."""
    return value if isinstance(value, bytes) else json.dumps(value).encode() + b"\n"


@schemathesis.serializer("application/toml", "text/csv")
def text(ctx, value):
    """A text as it is; anything else as JSON, which is neither."""
    if isinstance(value, bytes):
        return value
    return value.encode() if isinstance(value, str) else json.dumps(value).encode()


def lines_of(response):
    """The documents of a stream; none of any other answer."""
    media_type = response.headers.get("content-type", [""])[0]
    if not media_type.startswith(NDJSON):
        return []
    return [json.loads(line) for line in response.content.splitlines() if line.strip()]


def is_problem(line):
    return str(line.get("type", "")).startswith("urn:counterpoise:problem:")


@functools.lru_cache
def validator(document, name):
    """For a schema of the components by its name."""
    components = json.loads(document)
    schema = {"$ref": f"#/components/schemas/{name}", "components": components}
    return jsonschema_rs.Draft202012Validator(schema)


@schemathesis.check
def lines_conform(ctx, response, case):
    """Each line of a stream is a document of the operation's schema, or a problem."""
    raw = case.operation.schema.raw_schema
    answers = case.operation.definition.raw["responses"].get(str(response.status_code), {})
    content = answers.get("content", {}).get(NDJSON)
    components = json.dumps(raw["components"])
    for line in lines_of(response):
        if is_problem(line):
            name = "Problem"
        elif content is None:
            raise AssertionError(f"a stream with status {response.status_code} is not described")
        else:
            name = content["schema"]["$ref"].rsplit("/", 1)[1]
        for error in validator(components, name).iter_errors(line):
            raise AssertionError(f"a line is no {name}: {error.message}")


@schemathesis.hook
def filter_failure(context, failure, case, response):
    """What is no failure.

    A faulty line of a stream is refused in its own line of the answer, and the others
    are taken: that is no acceptance of what violates the schema.

    The schema of server-sent events is that of an event's `data`, a JSON text within a
    text, which OpenAPI 3.1 cannot say; schemathesis takes it for that of the whole
    event. `alarms/stream.rs` of the tests reads the events."""
    refused = [is_problem(line) for line in lines_of(response)]
    if type(failure).__name__ == "AcceptedNegativeData" and case.media_type == NDJSON:
        return not (refused and all(refused))
    return failure.title != "SSE event violates schema"
