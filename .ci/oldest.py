"""Print the oldest versions that pyproject.toml allows, as constraints for pip.

On a newer Python than the oldest one supported these versions may have no builds: then nothing is
printed, and the newest are installed.
"""

from __future__ import annotations

import re
import sys
import tomllib
from pathlib import Path

project = tomllib.loads(Path("pyproject.toml").read_text(encoding="utf-8"))["project"]
if project["requires-python"] == ">={}.{}".format(*sys.version_info):
    extras = project["optional-dependencies"]
    for requirement in [*project["dependencies"], *extras["parquet"], *extras["test"]]:
        name, version = re.fullmatch(r"([\w-]+)>=([\d.]+)", requirement).groups()
        print(f"{name}=={version}")
