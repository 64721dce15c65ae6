"""The remedies of a whole run."""

from dataclasses import replace

from pipeline.remedy.near import nearest
from pipeline.remedy.rings import rings_of
from pipeline.remedy.trial import OutOfTrials, Trials
from pipeline.replay import Run, Setting

MOST_PARTS, MOST_CYCLES = 20, 200
NONE_FOR = ("wrong_side", "unknown", "low_score")
NOT_LOOKED_FOR = "not looked for"


def remedies(setting: Setting, run: Run, most_parts: int = MOST_PARTS,
             most_cycles: int = MOST_CYCLES) -> dict[int, str | None]:
    """For the number of each missed part what would have saved it, None where no one number would.

    What belongs to the arm and the cell (joint limits, reach, keep-outs, room) is tried with an arm that waits at home;
    what belongs to time and slots so that all picks of the run are made as well. No more than most_parts parts are
    looked at, and most_cycles cycles worked out: parts beyond that are `NOT_LOOKED_FOR`.
    """
    trials = Trials(setting, run, most_cycles)
    told: dict[int, str | None] = {}
    blocked = rings_of(trials)
    missed = [(k, fate) for k, fate in enumerate(run.fates) if fate is not None]
    looked_at = 0
    for k, fate in sorted(missed, key=lambda one: (one[1].reason == "too_late", one[0])):
        number = run.parts[k].number
        if fate.reason in NONE_FOR:
            told[number] = None
            continue
        looked_at += 1
        try:
            found = nearest(trials, k, fate) if looked_at <= most_parts else NOT_LOOKED_FOR
        except OutOfTrials:
            found = NOT_LOOKED_FOR
        told[number] = "; ".join(part for part in (blocked.get(number), found) if part) or None
    return told


def with_remedies(setting: Setting, run: Run) -> Run:
    """The run with the remedy of each miss beside its reason; as it is where the tool has several grippers."""
    if len(setting.graspings) > 1:
        return run
    told = remedies(setting, run)
    fates = tuple(fate and replace(fate, remedy=told[part.number] or "")
                  for part, fate in zip(run.parts, run.fates, strict=True))
    return replace(run, fates=fates)
