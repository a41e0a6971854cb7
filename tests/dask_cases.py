"""Carries out a rehearsed sweep by dask in a process of its own, whose warnings are its own."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import textwrap
from pathlib import Path

from tests.sweep_cases import Rehearsal

ROOT = Path(__file__).parents[1]

CARRY_OUT = textwrap.dedent("""
    import json, sys
    from pathlib import Path
    import distributed
    from tnquench.cluster.sweep import SweepRun
    from tnquench.config.cluster import with_options
    from tnquench.config.points import load_sweep

    def main():
        config, folder, options, *program = sys.argv[1:]
        loaded, options = load_sweep(config), json.loads(options)
        if options.pop("begin_scheduler", False):
            workers = distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None)
            with workers:
                carry_out(loaded, Path(folder), {**options, "scheduler": workers.scheduler_address}, program)
        else:
            carry_out(loaded, Path(folder), options, program)

    def carry_out(loaded, folder, options, program):
        cluster = with_options(loaded.cluster, options, subject="test")
        sweep = SweepRun(loaded.points, folder, cluster, program=tuple(program))
        missing = sweep.missing(sweep.standings(), retry=False)
        sweep.carry_out(missing, tell=lambda line: print(line, flush=True))

    if __name__ == "__main__":
        main()
""")


def carry_out(stage: Rehearsal, config: Path, **options: object) -> subprocess.CompletedProcess[str]:
    script = stage.home / "carry_out.py"
    script.write_text(CARRY_OUT)
    said = json.dumps({"engine": "dask", "threads": 1, **options})
    words = [sys.executable, str(script), str(config), str(stage.sweep.folder), said, *stage.sweep.program]
    return subprocess.run(
        words,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
    )
