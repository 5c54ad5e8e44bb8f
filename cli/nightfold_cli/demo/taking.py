"""Playing the invented machine and taking what it left: shots, and readings of sensors."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING

from nightfold_cli.demo.truths import MACHINE
from nightfold_cli.progress import Progress

if TYPE_CHECKING:
    from nightfold.ledger.outcome import Intake
    from nightfold.simulator import Campaign
    from nightfold.store import Store


def play(folder: Path, nights: int | None) -> Campaign:
    """Write the campaign into a folder; None is all its nights."""
    from nightfold.simulator import write_campaign
    from nightfold.simulator.schedule import NIGHTS

    count = nights or NIGHTS
    with Progress("simulating nights", count, sys.stderr) as progress:
        return write_campaign(folder, nights=count, progress=progress)


def take_nights(store: Store, campaign: Campaign) -> Intake:
    """Take the shots of all nights, by the machine's card."""
    from nightfold.ledger.outcome import Intake

    store.use_card(campaign.card)
    total = Intake()
    with Progress("taking shots", len(campaign.files), sys.stderr) as progress:
        for count, path in enumerate(campaign.files):
            progress(count)
            total = total + store.take_file(path)
    return total


def take_readings(store: Store, campaign: Campaign) -> Intake:
    """Take what the sensors read."""
    with Progress("taking readings of sensors", campaign.sensors.stat().st_size, sys.stderr) as progress:
        return store.take_sensor_file(campaign.sensors, machine=MACHINE, progress=progress)
