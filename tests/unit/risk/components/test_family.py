"""What all components, frequencies and cover steps have in common."""

import json

import numpy as np
import pytest
from pydantic import TypeAdapter

from service.risk import covers
from service.risk.components import TYPICAL, TYPICAL_FREQUENCIES, AnyComponent, ClaimFrequency, ObservedComponent
from tests.unit.risk.blocks import GivenBlock, losses, normal_factors

FACTORS = normal_factors("rates", "equity", correlation=((1.0, 0.3), (0.3, 1.0)))
FAMILIES = [
    (AnyComponent, TYPICAL),
    (ClaimFrequency, TYPICAL_FREQUENCIES),
    (covers.Cover, covers.TYPICAL),
    (ObservedComponent, TYPICAL[:4]),
]
MEMBERS = [
    pytest.param(union, one, id=f"{union.__name__}-{type(one).__name__}")
    for union, members in FAMILIES
    for one in members
]
COMPONENTS = [pytest.param(one, id=one.kind) for one in TYPICAL]


@pytest.mark.parametrize(("union", "members"), FAMILIES, ids=lambda one: getattr(one, "__name__", ""))
def test_there_is_a_typical_instance_of_each_member(union, members):
    schema = TypeAdapter(union).json_schema()
    mapping = schema["discriminator"]["mapping"]
    tags = [getattr(one, "kind", None) or one.family for one in members]
    assert sorted(tags) == sorted(mapping)


@pytest.mark.parametrize(("union", "member"), MEMBERS)
def test_members_go_through_json_unchanged(union, member):
    adapter = TypeAdapter(union)
    assert adapter.validate_json(adapter.dump_json(member)) == member


@pytest.mark.parametrize(("union", "member"), MEMBERS)
def test_unknown_fields_are_refused_and_all_fields_described(union, member):
    adapter = TypeAdapter(union)
    document = json.loads(adapter.dump_json(member)) | {"misspelt": 1}
    with pytest.raises(ValueError, match="misspelt"):
        adapter.validate_json(json.dumps(document))
    schema = TypeAdapter(type(member)).json_schema()
    assert all("description" in field for field in schema["properties"].values())


@pytest.mark.parametrize("component", COMPONENTS)
def test_the_same_block_gives_the_same_losses(component):
    factors = np.random.Generator(np.random.Philox(1)).standard_normal((2, 500))
    first, again = (losses(component, FACTORS, GivenBlock(factors)) for _ in range(2))
    np.testing.assert_array_equal(first, again)
    assert np.all(np.isfinite(first))


@pytest.mark.parametrize("component", COMPONENTS)
def test_only_components_with_draws_of_their_own_read_the_stream(component):
    block = GivenBlock(np.zeros((2, 100)))
    before = block.generator.bit_generator.state["state"]["counter"].copy()
    losses(component, FACTORS, block)
    after = block.generator.bit_generator.state["state"]["counter"]
    assert component.own_draws == bool(np.any(before != after))
    assert component.own_draws == (component.draws_per_scenario > 0.0)


@pytest.mark.parametrize("component", COMPONENTS)
def test_components_without_factors_are_independent_and_have_tails(component):
    assert component.independent == (component.own_draws and not component.used_scores)
    tails = component.tails(FACTORS)
    assert min(tails.upper_index, tails.lower_index) > 2.0
    for sign in (1.0, -1.0):
        assert all(first <= second for first, second in component.growth(FACTORS, sign).products)
