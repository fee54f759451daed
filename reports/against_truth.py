"""Set the committed run of the archipelago against its known truth.

python reports/against_truth.py > reports/calibration/archipelago.md
"""

from __future__ import annotations

from pathlib import Path

import pandas as pd

REPO = Path(__file__).resolve().parents[1]
ROUTES = ["emergence", "contact", "inheritance"]


def table(frame: pd.DataFrame) -> str:
    """Write a table of counts as Markdown."""
    head = [str(frame.index.name), *map(str, frame.columns)]
    body = [
        [str(name), *map(str, row)] for name, row in zip(frame.index, frame.to_numpy(), strict=True)
    ]
    return "\n".join("| " + " | ".join(r) + " |" for r in [head, ["---"] * len(head), *body])


def main() -> None:
    """Print the page."""
    run = pd.read_csv(REPO / "reports" / "example" / "run" / "motifs.csv")
    truth = pd.read_csv(REPO / "data_examples" / "archipelago" / "truth.csv")
    both = run.merge(truth[["motif_id", "route"]], on="motif_id").rename(columns={"route": "truth"})
    print("# The archipelago against its truth\n")
    print("Command: `python reports/against_truth.py > reports/calibration/archipelago.md`, after")
    print("`python reports/make_example.py`. Invented data, made by code of its own.\n")
    print("Verdicts (by q, 120 motifs judged together):\n")
    print(table(pd.crosstab(both["truth"], both["verdict"])))
    print("\nVerdicts by plain p instead (the same rule, each motif alone):\n")
    emergence = both["p_against_emergence"] <= 0.05
    ancestry = both["p_against_ancestry"] <= 0.05
    scattered = both["p_against_transmission"] <= 0.05
    alone = pd.Series("undecided", index=both.index, name="verdict")
    alone[emergence & ~scattered] = "contact or ancestry"
    alone[emergence & ancestry & ~scattered] = "contact spread"
    alone[~emergence & scattered] = "parallel emergence"
    alone[emergence & scattered] = "several origins, then spread"
    print(table(pd.crosstab(both["truth"], alone)))
    told = both.dropna(subset=["contact_share"])
    largest = told[[f"{r}_share" for r in ROUTES]].to_numpy().argmax(axis=1)
    most = pd.Series([ROUTES[k] for k in largest], index=told.index, name="largest share")
    print(f"\nRoute with the largest share, for the {len(told)} motifs with shares:\n")
    print(table(pd.crosstab(told["truth"], most)))


if __name__ == "__main__":
    main()
