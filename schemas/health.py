"""Answers of the health endpoints."""

from marshmallow import fields

from schemas.fields import Answer, Text


class LiveSchema(Answer):
    class Meta:
        title = "Live"
        description = "The process answers."

    status = fields.String(metadata={"description": "Always `live`.", "enum": ["live"]})


class ReadySchema(Answer):
    class Meta:
        title = "Ready"
        description = "The service can take work."

    status = fields.String(metadata={"description": "Always `ready`.", "enum": ["ready"]})
    version = Text("Release of the service.")
