"""``python -m mrics.phantom OUT_DIR``: make the sample data again."""

from __future__ import annotations

import sys

from mrics.caution import RESEARCH_ONLY
from mrics.errors import MricsError
from mrics.phantom.sample import make_sample_data


def main(arguments: list[str]) -> int:
    """Write the sample data to the folder named."""
    if len(arguments) != 1 or arguments[0].startswith("-"):
        print("usage: python -m mrics.phantom OUT_DIR", file=sys.stderr)
        return 2
    try:
        written = make_sample_data(arguments[0])
    except MricsError as error:
        print(error, file=sys.stderr)
        return 2
    for path in written:
        print(path)
    print(RESEARCH_ONLY)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
