"""What the runs mean: measures, exact chains, games, verification, figures and the command line."""

from pathlib import Path

import sim

if Path(sim.__file__ or "").resolve().parent.parent != Path(__file__).resolve().parent.parent:
    raise ImportError(
        f"another package named `sim` stands in the way ({sim.__file__}); install brimline in a virtual "
        "environment of its own"
    )
