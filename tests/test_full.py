"""The first few cases of each large campaign, on every run."""

from __future__ import annotations

import pytest

from tests.full import CAMPAIGNS, Campaign


@pytest.mark.parametrize("campaign", CAMPAIGNS.values(), ids=list(CAMPAIGNS))
def test_the_sample_keeps_the_limit(campaign: Campaign) -> None:
    found = campaign.run(campaign.sample)

    assert found.cases > 0
    assert found.kept, f"{found.worst:g} {found.measure}, at most {found.limit:g}: {found.where}"


@pytest.mark.parametrize("campaign", CAMPAIGNS.values(), ids=list(CAMPAIGNS))
def test_the_full_size_is_worth_running(campaign: Campaign) -> None:
    assert campaign.full >= 10 * campaign.sample
