"""The picture that the README shows."""

import re
from pathlib import Path
from xml.etree import ElementTree

ROOT = Path(__file__).parents[1]


def test_the_picture_of_the_readme_is_the_base_chart_as_svg():
    (path,) = re.findall(r"!\[[^\]]+\]\(([^)]+\.svg)\)", (ROOT / "README.md").read_text(encoding="utf-8"))
    root = ElementTree.parse(ROOT / path).getroot()
    said = "".join(root.itertext())
    assert root.tag.endswith("}svg") and "all live customers" in said and "fortnightly" in said
