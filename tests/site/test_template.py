import pytest

from qa.errors import UsageError
from qa.site import write_site_template


def test_an_existing_file_is_left_alone(tmp_path):
    (tmp_path / "site.toml").write_text("mine")
    with pytest.raises(UsageError, match="left as it is"):
        write_site_template(tmp_path)
    assert (tmp_path / "site.toml").read_text() == "mine"
    assert [p.name for p in tmp_path.iterdir()] == ["site.toml"]


def test_a_file_where_a_folder_should_be(tmp_path):
    (tmp_path / "x").write_text("")
    with pytest.raises(UsageError, match="not a folder"):
        write_site_template(tmp_path / "x")
    with pytest.raises(UsageError, match="not a folder"):
        write_site_template(tmp_path / "x" / "y")
    (tmp_path / "z").mkdir()
    (tmp_path / "z" / "archive").write_text("")
    with pytest.raises(UsageError, match="not a folder"):
        write_site_template(tmp_path / "z")
