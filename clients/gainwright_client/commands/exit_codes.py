"""The closed list of the command's exit codes, and which one an outcome has. Light: `--help` prints it."""

from __future__ import annotations

from enum import IntEnum


class ExitCode(IntEnum):
    """How a command ended."""

    DONE = 0
    FAULT = 1
    USAGE = 2
    REFUSED = 3
    BUSY = 4
    UNREACHABLE = 5
    NOT_ALLOWED = 6
    DEVICE = 7
    SERVICE = 8
    MALFORMED_FILE = 9
    STOPPED = 10
    LIMITED = 11
    YIELDED = 12
    LOST = 13
    INTERRUPTED = 14
    EXIT_UNVERIFIED = 20
    GRADE_UNUSABLE = 21
    LEFT = 130


MEANINGS: dict[ExitCode, str] = {
    ExitCode.DONE: "done; of a test: completed, exit verified, grade good or fair",
    ExitCode.FAULT: "a fault of this program",
    ExitCode.USAGE: "the command line is wrong",
    ExitCode.REFUSED: "the service refused the request; it names the fields at fault",
    ExitCode.BUSY: "the loop or its interaction group is being driven, or an exit waits for a person",
    ExitCode.UNREACHABLE: "the service cannot be reached, or answers too late",
    ExitCode.NOT_ALLOWED: "no token, an unknown one, or a person who may not do this",
    ExitCode.DEVICE: "the device cannot be reached, refuses, or answers with what cannot be true",
    ExitCode.SERVICE: "a fault of the service: no worker, no store, an answer outside the contract",
    ExitCode.MALFORMED_FILE: "a file cannot be read; line and column are named",
    ExitCode.STOPPED: "the test was stopped by a person; exit verified",
    ExitCode.LIMITED: "the test met a limit; exit verified, or nothing had been moved",
    ExitCode.YIELDED: "somebody took the loop over; the test yielded and wrote nothing more",
    ExitCode.LOST: "the link to the device was lost; the device's watchdog has the output",
    ExitCode.INTERRUPTED: "the service was interrupted; exit verified",
    ExitCode.EXIT_UNVERIFIED: "the exit could not be verified: go to the loop and look",
    ExitCode.GRADE_UNUSABLE: "the record is unusable: no gains; the reasons are told",
    ExitCode.LEFT: "left by Ctrl-C; a test that was running goes on with its exit",
}

_OUTCOMES = {
    "stopped": ExitCode.STOPPED,
    "limited": ExitCode.LIMITED,
    "yielded": ExitCode.YIELDED,
    "lost": ExitCode.LOST,
    "interrupted": ExitCode.INTERRUPTED,
}


def of_experiment(outcome: str | None, exit: str, grade: str | None) -> ExitCode:
    """The exit code of a finished experiment. An exit in doubt comes before everything else."""
    if exit in ("unverified", "not_ours", "pending"):
        return ExitCode.LOST if outcome == "lost" else ExitCode.EXIT_UNVERIFIED
    if outcome != "completed":
        return _OUTCOMES.get(outcome or "", ExitCode.FAULT)
    return of_grade(grade) if exit == "verified" else ExitCode.EXIT_UNVERIFIED


def of_grade(grade: str | None) -> ExitCode:
    """The exit code of an analysis."""
    return ExitCode.DONE if grade in ("good", "fair") else ExitCode.GRADE_UNUSABLE


def listed() -> str:
    """The list as text, one code a line."""
    return "Exit codes:\n\n\b\n" + "\n".join(f"{code.value:>3}  {meaning}" for code, meaning in MEANINGS.items())
