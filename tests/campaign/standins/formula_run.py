"""The charflow command with formulas for ngspice."""

from __future__ import annotations

import formula_worker

if __name__ == "__main__":
    import charflow.campaign.pool
    import charflow.simulate.library
    from charflow.cli import main

    charflow.campaign.pool.work = formula_worker.work
    charflow.simulate.library.library_version = lambda: 39
    main()
