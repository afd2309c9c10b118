"""The front door: what is here, for whoever opens the address."""

from __future__ import annotations

from marshmallow import fields

from schemas.base import Answer, said


class Front(Answer):
    """Where to go from here."""

    service = fields.String(required=True, metadata=said("The service's name."))
    version = fields.String(required=True, metadata=said("The software's version."))
    caution = fields.String(required=True, metadata=said("What an alarm is not."))
    links = fields.Dict(
        keys=fields.String(),
        values=fields.String(),
        required=True,
        metadata=said("Paths by what they are for; health, method and document need no key."),
    )
