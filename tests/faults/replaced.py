"""A recording replaced while a run reads it: found, said, never mixed, and the next run is right."""

from __future__ import annotations

from collections.abc import Iterator

from laboratory import Happening, Laboratory, held_still, judged, reading, until

MOMENTS = {"planning": "survey_recordings", "an encoding job": "odograph.steps.encoding"}
CHANGED = "changed since this run was planned"


def replaced(lab: Laboratory) -> Iterator[Happening]:
    """Hold the reader still while it has the recording open, replace the file, let it go on, run again."""
    cases = [(moment, in_place) for moment in MOMENTS for in_place in (False, True)]
    for moment, in_place in cases[2:3] if lab.quick else cases:
        study = lab.fresh("replaced", short=True)
        run = study.start()
        found: list[int] = []

        def opened(study=study, word=MOMENTS[moment], found=found) -> bool:
            found[:] = reading(study, word, "bracken_1.nwb")
            return bool(found)

        until(opened, run, every_s=0.001)
        with held_still(found):
            lab.resort(study, in_place=in_place)
        outcome = study.end(run)
        said = outcome.says("changed while it was read") or outcome.says(CHANGED)
        number, last = study.again()
        happened = f"ended with {outcome.status}, {'said' if said else 'NOT SAID'}"
        happened += f"; run {number} ended with {last.status}"
        done = "rewritten in place" if in_place else "replaced by rename"
        what = f"recording replaced during {moment}"
        yield judged(lab, study, what, done, happened, bool(found) and said and number == 1, of="resorted")
