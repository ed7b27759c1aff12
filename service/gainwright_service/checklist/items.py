"""The one table of checklist items: what each asks, of which class, its star, its bounds, its remedy.

Owns wording and bounds. Does not measure (`before`, `after`) and does not decide (`sheet`). The bounds are
engineering proposals. `plant` carries every item; `bench` carries those that its signed sentence does not replace
and that need no question beyond the five of a bench start.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from gainwright_wire.loops import LoopClass

Stage = Literal["before", "during", "after"]

NOTICE = (
    "This checklist supports the people who answer for the loop; it replaces none of them. Local codes, permits, "
    "change control and licensed practice come first. The software limits, the software watchdog and the stop are "
    "no protection layer: no risk reduction may be claimed for them, and the stop is not an emergency stop. The "
    "plant's own interlocks and trips stay in service throughout."
)

BENCH_SENTENCE = (
    "Worst case, the output stays anywhere in its band until somebody notices: nothing is damaged and nobody is hurt."
)


@dataclass(frozen=True, slots=True)
class Item:
    """One item of the checklist.

    Parameters
    ----------
    id : str
    stage : before, during or after the test
    question : str
        Answered yes for a pass.
    remedy : str
        The one thing that removes a caution or a fail.
    starred : bool
        Cannot be overridden on `plant`.
    bench : bool
        Also carried by class `bench`.
    gates_bench : bool
        One of the few that block the start on `bench`.
    pass_to, caution_to : float or None
        Bounds of the measured number, in ``unit``; beyond ``caution_to`` is a fail. Where ``pass_to`` is above
        ``caution_to`` more is better.
    """

    id: str
    stage: Stage
    question: str
    remedy: str
    starred: bool = False
    bench: bool = False
    gates_bench: bool = False
    pass_to: float | None = None
    caution_to: float | None = None
    unit: str = ""


_BEFORE = (
    Item(
        "B1",
        "before",
        "Is the loop outside every safety function, sharing neither transmitter nor final element "
        "with one, with no "
        "limiting or override controller selected and independent high and low protection in service?",
        "Name the independent protection; a loop of a safety function is never tested.",
        starred=True,
        bench=True,
        gates_bench=True,
    ),
    Item(
        "B2",
        "before",
        "Is the exit action defined, and has it been written to the device and read back?",
        "Declare exit_action and prove it on the device once.",
        starred=True,
        bench=True,
        gates_bench=True,
    ),
    Item(
        "B3",
        "before",
        "Has the device's own watchdog been proven within the last 30 days?",
        "Give the loop a device watchdog, and prove it by pausing the heartbeat.",
        bench=True,
    ),
    Item(
        "B4",
        "before",
        "Has the way to stop been tried, both through the service and at the device?",
        "Try both before the output moves.",
        starred=True,
        bench=True,
        gates_bench=True,
    ),
    Item(
        "B5",
        "before",
        "Has the console operator of this shift acknowledged the test (and the relief, where it "
        "crosses a shift change)?",
        "Ask at the console and enter the name under acknowledged_by.",
    ),
    Item(
        "B6",
        "before",
        "Did somebody other than the person who asks for the test approve it?",
        "Enter another person under approver.",
    ),
    Item(
        "B7",
        "before",
        "Does the allowed deviation stay within half of the distance to the nearest alarm on both sides, and is it "
        "known which alarms the swing will cross? Nothing is shelved by the program.",
        "Reduce the allowed deviation.",
        pass_to=50.0,
        caution_to=80.0,
        unit="% of the distance",
    ),
    Item(
        "B8",
        "before",
        "Is the forecast swing, the return included, small against the allowed deviation?",
        "Lower limits.max_amplitude or widen the allowed deviation.",
        bench=True,
        pass_to=0.5,
        caution_to=0.8,
        unit="of the allowed deviation",
    ),
    Item(
        "B9",
        "before",
        "Is the largest amplitude small, and does the band keep clear of the ends of the output and "
        "of any split range?",
        "Lower limits.max_amplitude and keep the band 2 % of span inside the output's range.",
        bench=True,
        gates_bench=True,
        pass_to=5.0,
        caution_to=10.0,
        unit="% of span",
    ),
    Item(
        "B10",
        "before",
        "Do the planned switches leave room under the allowed ones, with every dwell long enough for "
        "the final element?",
        "Raise limits.max_switches or ask for fewer scored cycles.",
        bench=True,
        pass_to=50.0,
        caution_to=100.0,
        unit="% of the allowed switches",
    ),
    Item(
        "B11",
        "before",
        "Is the loop steady at the start: how far would the drift carry it over the test?",
        "Wait until the loop is steady.",
        bench=True,
        pass_to=0.25,
        caution_to=0.5,
        unit="of the allowed deviation",
    ),
    Item(
        "B12",
        "before",
        "Will the swing stand clear of noise and quantum, with enough samples in a period?",
        "Allow more amplitude, filter the signal, or scan faster.",
        bench=True,
        pass_to=10.0,
        caution_to=5.0,
        unit="swing over noise",
    ),
    Item(
        "B13",
        "before",
        "Is the loop free of a regular oscillation that comes from outside?",
        "Find the source of the oscillation first.",
        bench=True,
        pass_to=0.4,
        caution_to=0.6,
        unit="regularity, 0 to 1",
    ),
    Item(
        "B14",
        "before",
        "Does the process variable move the way the loop declares when the output rises?",
        "Correct output_effect, or look for a reversed wire or actuator.",
        bench=True,
    ),
    Item(
        "B15",
        "before",
        "Does the final element follow small reversals of the output?",
        "Inspect the final element before tuning around it.",
        pass_to=1.0,
        caution_to=3.0,
        unit="% of span",
    ),
    Item(
        "B16",
        "before",
        "Is the data good: signal inside its range, samples on time, clock within 1 s?",
        "Mend the signal or the link; slow the sampling down.",
        bench=True,
        pass_to=1.2,
        caution_to=2.0,
        unit="late interval over nominal",
    ),
    Item(
        "B17",
        "before",
        "Were the values of process variable and output compared with the local display?",
        "Read the local display aloud beside the service's values.",
    ),
    Item(
        "B18",
        "before",
        "Is no coupled loop being tested, and are the neighbours to be watched named (or 'none' signed for)?",
        "Declare interaction_groups and witnesses.",
    ),
    Item(
        "B19",
        "before",
        "Is the state of cascade, override and feedforward known, and is an outer loop out of cascade and following?",
        "Take the outer loop out of cascade.",
    ),
    Item(
        "B20",
        "before",
        "Is the as-found state complete: gains, form, units, mode, setpoint, limits, filter?",
        "Declare the controller and its gain registers, or write the gains down.",
        bench=True,
    ),
    Item(
        "B21",
        "before",
        "Does the test fit well into the time allowed?",
        "Raise limits.max_duration_s or ask for fewer scored cycles.",
        bench=True,
        pass_to=50.0,
        caution_to=100.0,
        unit="% of the allowed time",
    ),
    Item(
        "B22",
        "before",
        "Is production steady, with no permit open on the loop, no blackout window and no active alarm?",
        "Choose another time.",
    ),
    Item(
        "B23",
        "before",
        "Is somebody at the loop during the whole test?",
        "Be there, with a stop in reach.",
        bench=True,
        gates_bench=True,
    ),
    Item(
        "B24",
        "before",
        "Has the consequence of the swing for the product been accepted?",
        "Ask the owner of the product, with the forecast in hand.",
    ),
    Item(
        "B25",
        "before",
        "Are the written registers volatile, so that the test's writes wear nothing out?",
        "Look the registers up in the device's manual.",
    ),
    Item(
        "B26",
        "before",
        "Is there a permission bit that the operator owns and the service cannot set, and is it given?",
        "Add a permission bit, or give the reason why the loop has none.",
    ),
    Item("B27", "before", "Is there a work-order or change number?", "Enter it under work_order."),
)

_DURING = (
    Item(
        "D1",
        "during",
        "Did the process variable stay within the allowed deviation?",
        "Lower the amplitude.",
        starred=True,
        bench=True,
        pass_to=0.8,
        caution_to=1.2,
        unit="of the allowed deviation",
    ),
    Item(
        "D2",
        "during",
        "Did the process variable stay inside its hard limits?",
        "Test further from the limits.",
        starred=True,
        bench=True,
    ),
    Item(
        "D5",
        "during",
        "Did every commanded output stay in its band and within its largest change?",
        "Report it: this holds by construction.",
        starred=True,
        bench=True,
    ),
    Item("D6", "during", "Did nobody else act on the loop?", "Agree on who has the loop.", starred=True, bench=True),
    Item("D7", "during", "Did every reading arrive in time?", "Mend the link.", bench=True),
    Item(
        "D8",
        "during",
        "Did every half-period end in its time?",
        "Look for sticking, or a load too far off.",
        bench=True,
    ),
    Item(
        "D9",
        "during",
        "Did time and switches stay within what is allowed?",
        "Allow more, or ask for less.",
        bench=True,
    ),
    Item(
        "D10",
        "during",
        "Did worker, lock and store stay up throughout?",
        "Look at the service's own log.",
        bench=True,
    ),
)

_AFTER = (
    Item(
        "A1",
        "after",
        "Was the exit verified, and did the loop come back inside half of the allowed deviation?",
        "Go to the loop and look.",
        starred=True,
        bench=True,
        pass_to=0.5,
        caution_to=1.0,
        unit="of the allowed deviation",
    ),
    Item(
        "A2",
        "after",
        "Is everything that can be read as it was found: mode, setpoint, output, gains?",
        "Restore the differences by hand.",
        starred=True,
        bench=True,
    ),
    Item("A3", "after", "Is the record's grade good?", "Follow the findings, then repeat the test.", bench=True),
    Item(
        "A4",
        "after",
        "Was the precision reached, on at least two scored cycles?",
        "Score more cycles.",
        bench=True,
        pass_to=2.0,
        caution_to=1.5,
        unit="scored cycles",
    ),
    Item(
        "A5",
        "after",
        "Do the Fourier estimate and the model agree?",
        "Look at the finding on the model's fit.",
        bench=True,
        pass_to=10.0,
        caution_to=20.0,
        unit="% of ultimate gain",
    ),
    Item(
        "A6",
        "after",
        "Are the recommended gains of the same order as those found?",
        "Check the units before entering anything; beyond five times the approver decides.",
        bench=True,
        pass_to=2.0,
        caution_to=5.0,
        unit="times, up or down",
    ),
    Item(
        "A7",
        "after",
        "Are the margins of the recommended gains sufficient?",
        "Take the more conservative rule.",
        bench=True,
        pass_to=2.0,
        caution_to=3.0,
        unit="peak sensitivity",
    ),
    Item(
        "A8",
        "after",
        "Will the recommended gains keep the noise on the output small?",
        "Filter the process variable, or do without the derivative.",
        bench=True,
        pass_to=1.0,
        caution_to=3.0,
        unit="% of span",
    ),
    Item(
        "A9",
        "after",
        "Did a second person read form, units, action and ranges back from the controller?",
        "Have them read aloud at the faceplate.",
    ),
    Item("A10", "after", "Were the gains entered in manual or near setpoint, with no bump?", "Enter them in manual."),
    Item(
        "A11",
        "after",
        "Did a small check step, or a natural upset, stay within the forecast?",
        "Make a small setpoint step and compare.",
    ),
    Item(
        "A12",
        "after",
        "Has the loop been watched against its forecast, with the criteria for a roll-back kept?",
        "Watch it for at least 20 ultimate periods.",
    ),
    Item(
        "A13",
        "after",
        "Is the record closed: data, people, reason, result, as-left state and review date?",
        "Fill in what is missing and sign.",
    ),
)

ITEMS: tuple[Item, ...] = (*_BEFORE, *_DURING, *_AFTER)


def asked_of(loop_class: LoopClass, *stages: Stage) -> tuple[Item, ...]:
    """The items that a class carries in the given stages, in the table's order."""
    return tuple(item for item in ITEMS if item.stage in stages and (item.bench or loop_class is LoopClass.PLANT))
