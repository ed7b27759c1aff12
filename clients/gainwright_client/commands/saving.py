"""A finished test saved as files: the samples as CSV, the service's whole reply as JSON."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from gainwright_client.recorded import MalformedFile

if TYPE_CHECKING:
    from gainwright_client.client import Client
    from gainwright_wire.tasks import Experiment

SAMPLES, EXPERIMENT = "samples.csv", "experiment.json"


def save(client: Client, experiment: Experiment, folder: Path) -> list[Path]:
    """Write the two files and give their paths. Raises `MalformedFile` where the folder takes none."""
    texts = {
        SAMPLES: client.samples_csv(experiment.id),
        EXPERIMENT: experiment.model_dump_json(by_alias=True, indent=2) + "\n",
    }
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in texts.items():
            (folder / name).write_text(text, encoding="utf-8")
    except OSError as error:
        raise MalformedFile(str(folder), error.strerror or str(error), "a folder that can be written") from error
    return [folder / name for name in texts]
