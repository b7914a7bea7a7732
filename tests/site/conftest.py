from pathlib import Path

import pytest

from qa.site import Site, load_site

MINIMAL = """\
[department]
name = "Saltmarsh Imaging"
timezone = "Europe/London"

[[scanner]]
name = "north-3t"
match = { station = "NORTH3T" }
field_strength_T = 3.0

[[scanner]]
name = "south-15t"
match = { station = "SOUTH15T", serial = "S-77" }
field_strength_T = 1.5

[[expect]]
phantom = "sphere-170"
series = "QA sphere*"
patient_id = "QA-*"
settings = { repetition_ms = 500, slice_thickness_mm = 5.0, pixel_mm = 0.98, receive_coil = "HEAD*" }

"""


class Folder:
    """A department folder whose site.toml is the minimal one with changes."""

    def __init__(self, path: Path):
        self.path = path

    def load(self, addition: str = "", *, replace: tuple[str, str] | None = None) -> Site:
        text = MINIMAL
        if replace is not None:
            assert replace[0] in text
            text = text.replace(*replace)
        (self.path / "site.toml").write_text(text + addition, encoding="utf-8")
        return load_site(self.path)


@pytest.fixture
def folder(tmp_path):
    return Folder(tmp_path)
