"""Ends and states in the words that a technician reads."""

from autotune.experiment.hand_back import by_hand
from autotune.experiment.phases import Phase
from autotune.experiment.state import EndKind, Experiment


def end_in_words(experiment: Experiment) -> str:
    """How a test ended, why, and what became of the loop; one sentence each."""
    sentences = [_why(experiment), _what_became(experiment)]
    return " ".join(sentence for sentence in sentences if sentence)


def _why(experiment: Experiment) -> str:
    if experiment.trip is not None:
        return f"Stopped by {experiment.trip}."
    if experiment.refusals:
        return "Refused. " + " ".join(f"{refusal}." for refusal in experiment.refusals)
    if experiment.end is EndKind.ENOUGH:
        return f"Seen enough: {experiment.because or f'{len(experiment.usable_cycles)} cycles agree'}."
    return f"{experiment.because[:1].upper()}{experiment.because[1:]}." if experiment.because else ""


def _what_became(experiment: Experiment) -> str:
    ended = experiment.hand_back
    match experiment.phase:
        case Phase.STRANDED:
            detail = "" if ended is None else ended.detail
            return f"THE LOOP WAS NOT SHOWN TO BE AS FOUND. Go to the panel now and enter by hand: {detail}."
        case Phase.RELEASED:
            return "Somebody took the loop; it is theirs, and nothing was written afterwards."
        case Phase.ABORTED if experiment.as_found is None:
            return "Nothing was changed."
        case Phase.ABORTED | Phase.COMPLETE if ended is not None:
            return f"The loop is back: {ended.result.value}; {ended.detail}."
        case phase if phase.is_touched and experiment.as_found is not None:
            what = "The test broke off by our own fault. Go to the panel now and compare the loop"
            return f"{what} with what was found: {by_hand(experiment.as_found)}."
        case _:
            return ""
