"""Print the lowest versions that pyproject.toml allows, as constraints for pip.

python .ci/lowest.py > lowest.txt
PIP_CONSTRAINT=lowest.txt pip install -e '.[test,cluster]'
"""

import re
import tomllib
from pathlib import Path

# They look at the code and run no part of it.
TOOLS = ("ruff", "mypy", "pandas-stubs")
project = tomllib.loads((Path(__file__).parents[1] / "pyproject.toml").read_text())["project"]
extras = project["optional-dependencies"]
wanted = [*project["dependencies"], *extras["cluster"], *extras["test"]]
for line in sorted(set(wanted)):
    found = re.fullmatch(r"([A-Za-z0-9_.-]+)>=([0-9.]+)", line)
    if found and found[1] not in TOOLS:
        print(f"{found[1]}=={found[2]}")
