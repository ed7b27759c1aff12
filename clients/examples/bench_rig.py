"""A bench rig: register a loop, look at its forecast, test it, print the gains.

    python bench_rig.py loop.json

loop.json describes the loop (class `bench`); `gainwright practice-rig --json` prints five to start from. Be there, with
a stop in reach: Ctrl-C asks for a stop and waits until the output is handed back.

Exit status: 0 gains were proposed; 1 none were; 3 the service refused or cannot be reached.
"""

from __future__ import annotations

import contextlib
import json
import sys
from pathlib import Path

from gainwright_client import Client, ClientError
from gainwright_client.errors import Conflict, NotActive
from gainwright_wire.tasks import BENCH_SENTENCE, Experiment, StartExperiment, StreamProgress


def test_loop(client: Client, definition: dict[str, object]) -> Experiment:
    """Register the loop where it is new, and test it."""
    tag = str(definition["tag"])
    try:
        client.register_loop(definition)
    except Conflict:
        print(f"{tag} is registered already")
    forecast = client.forecast(tag)
    print(f"{tag}: at worst {forecast.worst_deviation:.3g} off, {forecast.time_to_finish_s:.0f} s at most")
    print(f"by starting you sign: {BENCH_SENTENCE}")
    started = client.start_experiment(tag, StartExperiment(attended=True, bench_sentence_signed=True))
    last: int | None = None
    while True:
        try:
            for told in client.follow(started.id, last):
                if isinstance(told, Experiment):
                    return told
                if isinstance(told, StreamProgress):
                    print(f"{told.elapsed_s:6.1f} s  {told.phase or 'queued':<10} {told.message}")
                else:
                    last = told.number
        except KeyboardInterrupt:
            print("stop asked for; waiting for the exit")
            with contextlib.suppress(NotActive):
                client.stop_experiment(started.id)


def main() -> int:
    """The script; its exit status."""
    if len(sys.argv) != 2:
        sys.stderr.write(__doc__ or "")
        return 2
    try:
        with Client() as client:
            found = test_loop(client, json.loads(Path(sys.argv[1]).read_text(encoding="utf-8")))
    except ClientError as error:
        sys.stderr.write(f"{error}\n")
        return 3
    print(f"{found.outcome}, exit {found.exit}: {found.exit_detail}")
    if found.ultimate_gain and found.ultimate_period_s:
        gain, period = found.ultimate_gain, found.ultimate_period_s
        print(f"ultimate gain {gain.value:.4g} [{gain.low:.4g}, {gain.high:.4g}]")
        print(f"ultimate period {period.value:.4g} s [{period.low:.4g}, {period.high:.4g}]")
    for proposal in found.proposals:
        settings = ", ".join(f"{s.name} {s.value:.4g} {s.unit}" for s in proposal.settings)
        print(f"{'*' if proposal.recommended else ' '} {proposal.rule} {proposal.controller_kind}: {settings}")
    return 0 if any(p.recommended for p in found.proposals) else 1


if __name__ == "__main__":
    sys.exit(main())
