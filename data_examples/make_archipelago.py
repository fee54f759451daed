"""Write the invented archipelago again, in all its forms, beside this script.

    python data_examples/make_archipelago.py [FOLDER]

Seeded: the files come out equal to the byte (tests/test_example.py says so).
"""

from __future__ import annotations

import sys
from pathlib import Path

from twicetold.example import write_example


def main(folder: Path) -> None:
    write_example(folder / "archipelago", force=True)
    write_example(folder / "archipelago-cldf", form="cldf", force=True)
    write_example(folder, form="workbook", force=True)


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
