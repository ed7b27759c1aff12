"""The one table of checklist items: what each asks, of which class, its star, its bounds, its remedy.

Owns wording and bounds. Does not measure (`before`, `after`) and does not decide (`sheet`). The bounds are
engineering proposals. `plant` carries every item; `bench` carries those that its signed sentence does not replace
and that need no question beyond the five of a bench start.
"""

from __future__ import annotations

from gainwright_service.checklist.item import Item, Stage
from gainwright_service.checklist.items_before import BEFORE
from gainwright_wire.loops import LoopClass

NOTICE = (
    "This checklist supports the people who answer for the loop; it replaces none of them. Local codes, permits, "
    "change control and licensed practice come first. The software limits, the software watchdog and the stop are "
    "no protection layer: no risk reduction may be claimed for them, and the stop is not an emergency stop. The "
    "plant's own interlocks and trips stay in service throughout."
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

ITEMS: tuple[Item, ...] = (*BEFORE, *_DURING, *_AFTER)


def asked_of(loop_class: LoopClass, *stages: Stage) -> tuple[Item, ...]:
    """The items that a class carries in the given stages, in the table's order."""
    return tuple(item for item in ITEMS if item.stage in stages and (item.bench or loop_class is LoopClass.PLANT))
