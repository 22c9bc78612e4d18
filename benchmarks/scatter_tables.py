"""Make tables of take-to-take scatter from saved profiles, in the form of those in ``timbre_match/compare/data``.

Each profile is one instrument played in one way, with two takes or more; profiles of one family are pooled. The tables
`repeatability.csv` and `take_structure.csv` go into a new folder, and are printed.

    python -m benchmarks.scatter_tables PROFILE... --out FOLDER
"""

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from timbre_match.compare.scatter_tables import repeatability_rows, structure_rows, table_text
from timbre_match.errors import TimbreMatchError
from timbre_match.keep.files import load_profile
from timbre_match.keep.writing import write_folder_whole


def write_tables(profiles: Sequence[Path], folder: Path) -> None:
    """Write both tables, or neither, and print them."""
    loaded = [load_profile(path) for path in profiles]
    texts = {
        "repeatability.csv": table_text(repeatability_rows(loaded)),
        "take_structure.csv": table_text(structure_rows(loaded)),
    }
    write_folder_whole(folder, {name: text.encode("utf-8") for name, text in texts.items()})
    for name, text in texts.items():
        print(f"{folder / name}\n{text}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("profiles", type=Path, nargs="+", metavar="PROFILE")
    parser.add_argument("--out", type=Path, required=True, metavar="FOLDER")
    arguments = parser.parse_args()
    try:
        write_tables(arguments.profiles, arguments.out)
    except TimbreMatchError as error:
        sys.exit(str(error))


if __name__ == "__main__":
    main()
