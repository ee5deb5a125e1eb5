"""The full statistical study for the record: coverage, pulls, false alarms and worlds from outside.

Run it as ``python tests/studies/coverage_study.py --config configs/joint.toml --mocks 1000``, with
``--outside CONFIG`` for further worlds; it prints the page that ``quietlimb trust`` writes. It takes about
half a second a mock and process, and a thousand mocks are 2,400 with those that have no signal or come from outside.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from reduce.report.trust_page import trust_page
from reduce.trust import packed_trust, trust
from reduce.trust_facts import trust_facts
from sims.config_load import load_config
from sims.products import write_product

JOINT = Path(__file__).parents[2] / "configs" / "joint.toml"


@contextmanager
def plain(title: str, total: int) -> Iterator[Callable[[int], None]]:
    """No bar, but a word."""
    print(f"{title}: {total}", flush=True)
    yield lambda done: None


def main() -> None:
    """Run the study and print its page."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--config", type=Path, default=JOINT)
    parser.add_argument("--mocks", type=int, default=1000)
    parser.add_argument("--outside", type=Path, action="append", default=[])
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--record", type=Path, help="NetCDF file for every number of every mock")
    options = parser.parse_args()
    config = load_config(options.config)
    outside = [(path.stem, load_config(path)) for path in options.outside]
    found = trust(config, options.mocks, plain, outside=outside, processes=options.processes)
    if options.record is not None:
        write_product(packed_trust(found), options.record)
    print(trust_page(trust_facts(found), config))


if __name__ == "__main__":
    main()
