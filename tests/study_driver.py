"""Runs a study with a stand-in for the solver, as a process that tests may kill: STUDY OUT SCHEDULER STUB."""

import json
import signal
import sys

import study_stubs
from bemescape.errors import EscapeError
from bemescape.study.run import StudyStopped, run_study

if __name__ == "__main__":
    # A shell without job control starts what stands in the background with interrupts ignored.
    signal.signal(signal.SIGINT, signal.default_int_handler)
    study, out, scheduler, stub = sys.argv[1:]
    try:
        run_study(
            study,
            out,
            scheduler=scheduler,
            report=False,
            solve=getattr(study_stubs, stub),
            events=lambda event: print(json.dumps(dict(event)), flush=True),
        )
    except StudyStopped as stop:
        print(stop, flush=True)
        sys.exit(130)
    except EscapeError as error:
        print(error, flush=True)
        sys.exit(2)
