"""Every setting and every role is in the README, and the README names no other setting."""

import re
from pathlib import Path

from service.access import ROLES
from service.settings import TABLE

README = (Path(__file__).parents[2] / "README.md").read_text("utf-8")


def test_every_setting_is_documented_with_its_default() -> None:
    for setting in TABLE:
        (row,) = [line for line in README.splitlines() if line.startswith(f"| `{setting.name}` ")]
        assert setting.default in row
        assert setting.sentence in row


def test_the_readme_names_no_setting_that_does_not_exist() -> None:
    assert set(re.findall(r"SHOALMARK_[A-Z_]+", README)) <= {setting.name for setting in TABLE}


def test_every_role_is_documented() -> None:
    for role in ROLES:
        assert f"| `{role}` " in README
