"""marshmallow schemas: what is checked and what OpenAPI says, in one place."""
