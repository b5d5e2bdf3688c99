"""The one shape of every error: a problem of RFC 9457."""

from marshmallow import fields

from schemas.fields import Answer, Text


class ProblemSchema(Answer):
    class Meta:
        title = "Problem"
        description = "An error (RFC 9457)."

    sometimes = ("errors",)

    type = fields.String(
        metadata={"description": "Kind of problem; relative to the service's root.", "format": "uri-reference"},
    )
    title = Text("The kind in words.")
    status = fields.Integer(metadata={"description": "HTTP status.", "minimum": 400, "maximum": 599})
    detail = Text("What is wrong with this request.")
    errors = fields.Dict(
        keys=fields.String(),
        values=fields.String(),
        metadata={
            "description": "JSON Pointer into what was sent (or `/name` of a column, part or parameter) -> message."
        },
    )
    request_id = Text("The `X-Request-Id` of this request, as it stands in the server's log.")
