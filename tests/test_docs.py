"""What the documents say of the code is so."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from circuitgen.core.run_tables import dictionary_markdown
from circuitgen.spec import RECORDING_COLUMNS, AppositionRules, ColumnSpec, Conduction

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text()
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text()


def test_data_dictionary_is_the_generated_one():
    kept = DEVELOPERS.split("<!-- dictionary begins -->")[1]
    kept = kept.split("<!-- dictionary ends -->")[0]
    assert kept.strip() == dictionary_markdown().strip()


def test_readme_names_every_key_and_column():
    keys = [*ColumnSpec.model_fields, *AppositionRules.model_fields]
    keys += [*Conduction.model_fields, *RECORDING_COLUMNS]
    keys += ["sign", "density_per_mm3", "count", "morphologies", "upright", "targets"]
    keys += ["soma_radius_um", "ais_um", "groups", "layers", "thickness_um", "seed"]
    missing = [key for key in keys if not re.search(rf"\b{key}\b", README)]
    assert not missing


@pytest.mark.parametrize("document", ["README.md", "DEVELOPERS.md"])
def test_links_lead_somewhere(document):
    text = (ROOT / document).read_text()
    links = re.findall(r"\]\(([^)#]+)\)", text)
    assert links
    for link in links:
        assert link.startswith("https://") or (ROOT / link).exists(), link


def test_check_script_runs_the_readme_command():
    commands = re.findall(r"```\n(python3 -m venv .*)\n```", README)
    assert len(commands) == 2
    assert commands[1] in (ROOT / ".ci" / "run").read_text()
