"""README and architecture page speak about what exists."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from extractor.documents import declaration_document
from extractor.model import METHODS
from extractor.pipeline import declare
from service.jobs.states import FINAL_STATES
from service.settings import setting_rows
from service.store.contracts import STAGES, STATES

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text()
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text()


def test_every_setting_is_in_the_readme():
    """The table of settings in the README is the one the program would print."""
    for row in setting_rows():
        line = f"| `{row['variable']}` | {row['default'] or '–'} | {row['unit']} | {row['limits']} | {row['meaning']} |"
        assert line in README, line


def test_every_declaration_field_is_explained():
    """Each field of a declaration document, down to the leaves, is named in the README."""
    document = declaration_document(declare(rig="Wren bench", rounds=10**6, method="factor-closed", soundness=1e-6, score=0.8))
    document["acceptance"] = {"count": "", "limit": 0, "tangent": 0.0}
    for name, value in document.items():
        for leaf in value if isinstance(value, dict) else ():
            assert re.search(rf"`{name}\.{leaf}`|`\.{leaf}`|`{leaf}`", README), f"{name}.{leaf}"
        assert name in README, name


def test_methods_states_and_stages_are_named():
    """Methods, run states and stages stand in the README in the program's own words."""
    for word in (*METHODS, *STATES, *FINAL_STATES, *STAGES):
        assert word in README, word


@pytest.mark.parametrize("path", sorted({match for match in re.findall(r"`((?:extractor|service|deploy|tests)/[\w/.]*)`", DEVELOPERS)}))
def test_paths_of_the_architecture_page_exist(path):
    """A folder or file named in DEVELOPERS.md is there."""
    assert (ROOT / path).exists(), path
