"""A job that publishes models without end: `python -m tests.model_publisher FOLDER MODEL...`.

Each is published as the nightly job does it, under the lock, and then named on a line, so
that whoever kills this knows which ones were said to be in use.
"""

from __future__ import annotations

import itertools
import sys
import time
from datetime import UTC, datetime
from pathlib import Path

from scoring.artefact import read_model
from training.kept import KeptModels

# So many that none is removed while a service reads it.
_N_KEEP = 12
_PAUSE_S = 0.01


def main(folder: Path, paths: list[Path]) -> None:
    """Publish the models in turn until killed."""
    kept = KeptModels(folder)
    for model in itertools.cycle([read_model(path) for path in paths]):
        with kept.lock():
            published = kept.publish(model, datetime.now(UTC))
            sys.stdout.write(f"{published.path.name}\n")
            sys.stdout.flush()
            kept.prune(_N_KEEP)
        time.sleep(_PAUSE_S)


if __name__ == "__main__":
    main(Path(sys.argv[1]), [Path(word) for word in sys.argv[2:]])
