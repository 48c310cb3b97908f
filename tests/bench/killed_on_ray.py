"""Kill the driver of a run on Ray ten times, each time at another request, and finish it with the same command.

    python tests/bench/killed_on_ray.py --kills 10 --seed 2031

What is asserted is what ``tests/e2e/test_killed_runs.py`` asserts: the bits of the undisturbed run, no committed cell
read again, no half-written object, no result without a manifest.
"""

from __future__ import annotations

import argparse
import os
import sys
import tempfile
from pathlib import Path
from types import SimpleNamespace

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
sys.path.insert(0, str(Path(__file__).parents[1] / "e2e"))

import test_killed_runs as test
from sniffing_proxy import SniffingProxy

from shardfold.local_s3 import Seaweed
from shardfold.store import open_store


def main() -> None:
    """Kill, finish, check and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=10)
    parser.add_argument("--seed", type=int, default=2031)
    arguments = parser.parse_args()
    with Seaweed() as server, SniffingProxy(server.endpoint) as proxy, tempfile.TemporaryDirectory() as folder:
        os.environ.update(server.environment)
        server.make_bucket("killed")
        bucket = SimpleNamespace(location="s3://killed", endpoint=server.endpoint)
        test.write_campaign(open_store(f"{bucket.location}/campaign", bucket.endpoint))
        total, undisturbed = test.requests_of_a_run(bucket, proxy, Path(folder), "2")
        rng = np.random.Generator(np.random.PCG64(arguments.seed))
        for number, moment in enumerate(rng.choice(np.arange(3, total - 2), size=arguments.kills, replace=False)):
            killed = test.kill_and_finish(bucket, proxy, Path(folder), "2", int(moment), number, undisturbed)
            print(f"request {moment} of {total}: {'killed' if killed else 'ended before'}, same bits", flush=True)


if __name__ == "__main__":
    main()
