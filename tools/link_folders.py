"""Make .links/pulsetally/<folder>, so that the type checker finds the four folders.

Run once per clone. Neither installing nor testing needs the links; only mypy reads them,
since it can't follow the mapping from folders to packages in pyproject.toml.
"""

import os
from pathlib import Path

FOLDERS = ("sequencer", "drivers", "simulators", "recipes")


def main() -> None:
    """Create the missing links; leave those that stand."""
    root = Path(__file__).resolve().parent.parent
    links = root / ".links" / "pulsetally"
    links.mkdir(parents=True, exist_ok=True)
    for folder in FOLDERS:
        link = links / folder
        if not link.exists():
            link.symlink_to(os.path.relpath(root / folder, links), target_is_directory=True)


if __name__ == "__main__":
    main()
