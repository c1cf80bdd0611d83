from pathlib import Path

import pytest

from steelyard.study import Study

EXAMPLE = Path(__file__).parents[2] / "examples" / "piped-water"


@pytest.fixture(scope="session")
def answer():
    """The whole job on the invented example."""
    import warnings

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return Study.read(EXAMPLE / "study.toml").run()
