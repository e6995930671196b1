"""The files of one job, loaded, checked against one another, and planned."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.config.faults import Faults
from controller.config.instrument import Instrument
from controller.config.load import Loaded, load_faults, load_instrument, load_sample, load_sequence
from controller.config.sample import Sample
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused
from controller.route.plan import Route, plan_route


@dataclass(frozen=True, slots=True)
class Job:
    """A sequence with the instrument, and for a rehearsal the sample and the faults, that go with it."""

    sequence: Loaded[Sequence]
    instrument: Loaded[Instrument]
    sample: Loaded[Sample] | None
    faults: Loaded[Faults] | None
    route: Route

    def files(self) -> list[tuple[str, str, str]]:
        """(role, path, text) of every file that was read, for the record."""
        named: dict[str, Loaded[Any] | None] = {
            "sequence": self.sequence,
            "instrument": self.instrument,
            "sample": self.sample,
            "faults": self.faults,
        }
        return [(role, loaded.path, loaded.text) for role, loaded in named.items() if loaded is not None]


def load_job(
    sequence: str,
    *,
    instrument: str | None = None,
    sample: str | None = None,
    faults: str | None = None,
    simulated: bool,
) -> Job:
    """Read and check all files of a job. Raises ConfigRefused.

    Paths inside the sequence file are relative to it; those given here replace them.
    """
    loaded = load_sequence(sequence)
    folder = Path(sequence).parent
    hardware = load_instrument(instrument or str(folder / loaded.settings.instrument))
    source: Loaded[Sample] | None = None
    if simulated or hardware.settings.kind == "simulated":
        named = sample or (str(folder / loaded.settings.sample) if loaded.settings.sample else None)
        if named is None:
            raise ConfigRefused(
                "a rehearsal needs a sample file",
                file=sequence,
                key="sample",
                next_action="name one with the key `sample` or the option --sample",
            )
        source = load_sample(named)
    return Job(
        sequence=loaded,
        instrument=hardware,
        sample=source,
        faults=load_faults(faults) if faults else None,
        route=plan_route(loaded.settings, hardware.settings, file=sequence, text=loaded.text),
    )
