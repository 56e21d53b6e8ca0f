"""The family of refusals."""

from __future__ import annotations

import pytest

from scoring.errors import BadArtefact, BadChannelTable, OddbranchError


@pytest.mark.parametrize("kind", [BadArtefact, BadChannelTable])
def test_a_refusal_is_one_sentence_with_its_data_beside_it(
    kind: type[BadArtefact] | type[BadChannelTable],
) -> None:
    refused = kind("model/tables.npz", "is damaged")
    assert isinstance(refused, OddbranchError)
    assert str(refused) == "model/tables.npz: is damaged"
    assert (refused.place, refused.what) == ("model/tables.npz", "is damaged")


def test_a_refusal_ends_the_command_with_one() -> None:
    assert OddbranchError("no").exit_code == 1
