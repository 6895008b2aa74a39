"""A small run whose names try to break the page; all numbers invented."""

from __future__ import annotations

import json
from html.parser import HTMLParser
from pathlib import Path

from builders_run import RECORDINGS, ROOT, SPEC

from circuitgen.run import build

SCRIPT = "<script>window.broken=1</script>"
QUOTES = """it's "quoted" & <b>bold</b> ${data} $100"""
FOREIGN = "Lagen-Zelle für Prüfung: ñandú, 星形細胞, клетка, חלקיק, ∑≥µm, "
LONG = FOREIGN + "x" * (80 - len(FOREIGN))
NAMES = {"pyramid": SCRIPT, "basket": QUOTES, "stellate": LONG}


def hostile_spec(folder: Path) -> Path:
    """Write the small circuit's spec under names of scripts, quotes, foreign letters."""
    folder.mkdir(parents=True, exist_ok=True)
    shape = "{shape: cylinder, diameter_um: 140}"
    text = SPEC.format(column=shape, morphologies=ROOT / "morphologies")
    for plain, name in NAMES.items():
        text = text.replace(f"  {plain}:", f"  {json.dumps(name)}:")
    text = text.replace("name: test-patch", f"name: {json.dumps(SCRIPT)}")
    members = json.dumps([SCRIPT, LONG])
    text = text.replace("excitatory: [pyramid, stellate]", f"</table>: {members}")
    rows = []
    # A recording that the circuit cannot but contradict.
    contradicted = RECORDINGS.replace("stellate,30,20,", "stellate,30,1,")
    for line in contradicted.splitlines()[1:]:
        source, pre, post, *rest = line.split(",")
        known = NAMES | {"excitatory": "</table>"}
        words = [f"</script>{source}", known[pre], known[post]]
        rows.append([f'"{word.replace(chr(34), chr(34) * 2)}"' for word in words] + rest)
    head = RECORDINGS.splitlines()[0]
    table = "\n".join([head, *(",".join(row) for row in rows)]) + "\n"
    (folder / "recordings.csv").write_text(table, encoding="utf-8")
    (folder / "spec.yaml").write_text(text, encoding="utf-8")
    return folder / "spec.yaml"


def hostile_run(folder: Path) -> Path:
    """Build the small circuit under those names."""
    return build(hostile_spec(folder), folder / "run").folder


class Page(HTMLParser):
    """The page as a parser of the standard library sees it."""

    def __init__(self, path: Path):
        super().__init__()
        self.raw = path.read_text(encoding="utf-8")
        self.tags: list[tuple[str, dict]] = []
        self.texts: dict[str, list[str]] = {"script": [], "data": [], "other": []}
        self._inside = "other"
        self.feed(self.raw)
        self.data = json.loads("".join(self.texts["data"]))

    def handle_starttag(self, tag, attrs):
        """Keep a tag."""
        attributes = dict(attrs)
        self.tags.append((tag, attributes))
        if tag == "script":
            is_data = attributes.get("id") == "report-data"
            self._inside = "data" if is_data else "script"

    def handle_endtag(self, tag):
        """Leave a script."""
        if tag == "script":
            self._inside = "other"

    def handle_data(self, data):
        """Keep text by where it stands."""
        self.texts[self._inside].append(data)

    @property
    def words(self) -> str:
        """All text outside scripts."""
        return " ".join(self.texts["other"])
