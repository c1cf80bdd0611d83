"""A plan's other spelling: a TOML file whose keys are the fields of the plan's dataclasses."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from steelyard.errors import PlanError
from steelyard.keys import section
from steelyard.plan import Plan


def read_plan(path: str | Path) -> dict[str, Any]:
    """Read a TOML plan and return the keyword arguments of a ``Plan``, ``folder`` included.

    Raises
    ------
    PlanError
        The file cannot be read, is not TOML, or has a key no section knows.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            raw = tomllib.load(file)
    except FileNotFoundError:
        raise PlanError(f"There is no plan file {path}.", mend="Check the name and the folder.") from None
    except (OSError, UnicodeDecodeError) as error:
        raise PlanError(f"The plan file {path} cannot be read: {error}.", mend="Check the file.") from None
    except tomllib.TOMLDecodeError as error:
        raise PlanError(
            f"The plan file {path} is not valid TOML: {error}.",
            mend="Look at that line: text needs quotes, lists need brackets.",
        ) from None
    arguments = section(raw, Plan, "")
    arguments["folder"] = path.parent
    return arguments
