"""The schema as the OpenAPI document shows it."""

from __future__ import annotations

import pytest
from apispec import APISpec
from apispec.ext.marshmallow import MarshmallowPlugin

from schemas.transaction import BatchSchema, TransactionSchema
from service.batches.rows import Row


@pytest.fixture(scope="module")
def described():
    spec = APISpec("t", "1", "3.1.0", plugins=[MarshmallowPlugin()])
    spec.components.schema("Batch", schema=BatchSchema)
    return spec.to_dict()["components"]["schemas"]


def test_every_field_is_described_with_an_example(described):
    fields = described["Transaction"]["properties"]
    assert set(fields) == set(Row.__struct_fields__)
    for name, field in fields.items():
        assert field["description"], name
        assert "example" in field, name


def test_required_and_unknown_fields(described):
    assert sorted(described["Transaction"]["required"]) == ["amount", "merchant"]
    assert described["Transaction"]["additionalProperties"] is False
    assert described["Batch"]["required"] == ["transactions"]
    assert described["Batch"]["additionalProperties"] is False


def test_shapes_of_fields(described):
    fields = described["Transaction"]["properties"]
    assert [kind["type"] for kind in fields["amount"]["oneOf"]] == ["integer", "string"]
    assert fields["at"]["format"] == "date-time"
    assert fields["at"]["type"] == "string"
    assert fields["offset"]["maximum"] == 2**53 - 1
    for name in ("merchant", "currency", "flow", "id", "category", "source"):
        assert fields[name]["pattern"].startswith("^(?:"), name


def test_examples_are_valid():
    example = {
        name: field.metadata["example"] for name, field in TransactionSchema().fields.items()
    }
    clean = TransactionSchema().load(example)
    assert clean["amount"] == 1999
    assert clean["at"] == 1796040000000
