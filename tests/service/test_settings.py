"""Settings: the table, refusals, masks, and the secret key."""

from __future__ import annotations

import os
import stat
import subprocess
import sys
from pathlib import Path

import pytest

from service.errors import SettingsError
from service.settings import NAMES, TABLE, describe, load_settings, masked, secret_key

HOME = {"HOME": "/people/shift"}


def test_without_any_setting_the_defaults_work():
    settings = load_settings(HOME)
    assert settings.data_folder == Path("/people/shift/.local/share/shoalmark")
    assert settings.database_url == "sqlite:////people/shift/.local/share/shoalmark/shoalmark.sqlite3"
    assert (settings.host, settings.port, settings.trusted_proxies) == ("127.0.0.1", 8080, 0)
    assert (settings.log_level, settings.tls_certificate, settings.tls_key) == ("info", None, None)
    assert settings.given == frozenset()


@pytest.mark.parametrize(("processors", "threads"), [(None, 3), (1, 3), (2, 5), (3, 7), (4, 8), (64, 8)])
def test_threads_follow_the_processors(monkeypatch, processors, threads):
    monkeypatch.setattr(os, "cpu_count", lambda: processors)
    assert load_settings(HOME).threads == threads
    assert load_settings({**HOME, "SHOALMARK_THREADS": "8"}).threads == 8


def test_the_data_folder_follows_the_xdg_variable_when_it_is_absolute():
    assert load_settings({**HOME, "XDG_DATA_HOME": "/data"}).data_folder == Path("/data/shoalmark")
    relative = load_settings({**HOME, "XDG_DATA_HOME": "data"})
    assert relative.data_folder == Path("/people/shift/.local/share/shoalmark")


def test_every_setting_is_read(tmp_path):
    pem = tmp_path / "tower.pem"
    pem.write_text("certificate")
    environ = {
        "SHOALMARK_DATABASE_URL": "postgresql://mill@db/plant",
        "SHOALMARK_DATA_FOLDER": str(tmp_path),
        "SHOALMARK_HOST": "0.0.0.0",
        "SHOALMARK_PORT": "8443",
        "SHOALMARK_TLS_CERTIFICATE": str(pem),
        "SHOALMARK_TLS_KEY": str(pem),
        "SHOALMARK_TRUSTED_PROXIES": "1",
        "SHOALMARK_LOG_LEVEL": "Warning",
        "SHOALMARK_THREADS": "16",
        "SHOALMARK_DEMO": "no",
    }
    settings = load_settings({**HOME, **environ})
    assert settings.database_url == "postgresql://mill@db/plant"
    assert (settings.data_folder, settings.host, settings.port) == (tmp_path, "0.0.0.0", 8443)
    assert settings.tls_certificate == settings.tls_key == pem
    assert (settings.trusted_proxies, settings.log_level, settings.threads) == (1, "warning", 16)
    assert settings.given == frozenset(environ)
    assert {*environ, "SHOALMARK_DATABASE_URL_FILE"} == set(NAMES)  # none is left out here


def test_the_process_environment_is_not_looked_at(monkeypatch):
    monkeypatch.setenv("SHOALMARK_PORT", "9999")
    assert load_settings(HOME).port == 8080


def test_an_empty_value_counts_as_not_set():
    assert load_settings({**HOME, "SHOALMARK_PORT": " ", "SHOALMARK_DATABASE_URL": ""}).port == 8080


def test_an_unknown_name_is_refused_with_the_nearest_known_one():
    with pytest.raises(SettingsError, match="SHOALMARK_PROT is no setting; the nearest is SHOALMARK_PORT"):
        load_settings({**HOME, "SHOALMARK_PROT": "8080"})


@pytest.mark.parametrize(
    ("name", "value", "expected"),
    [
        ("PORT", "0", "expected a whole number, 1 to 65535"),
        ("PORT", "65536", "expected a whole number, 1 to 65535"),
        ("PORT", "http", "expected a whole number, 1 to 65535"),
        ("THREADS", "1.5", "expected a whole number, 1 to 64"),
        ("TRUSTED_PROXIES", "-1", "expected a whole number, 0 to 10"),
        ("LOG_LEVEL", "loud", "expected debug, info, warning, error"),
        ("TLS_CERTIFICATE", "/nowhere/tower.pem", "no file that can be read"),
        ("DATABASE_URL_FILE", "/nowhere/url", "no file that can be read"),
        ("DATABASE_URL", "oracle://a:secret@b", "must begin with sqlite:/// or postgresql://"),
    ],
)
def test_a_value_that_cannot_be_used_is_refused_by_name(name, value, expected):
    with pytest.raises(SettingsError, match=expected) as caught:
        load_settings({**HOME, f"SHOALMARK_{name}": value})
    assert f"SHOALMARK_{name}" in caught.value.message
    assert "secret" not in caught.value.message


def test_all_faults_are_named_at_once():
    with pytest.raises(SettingsError) as caught:
        load_settings({**HOME, "SHOALMARK_PORT": "x", "SHOALMARK_THREADS": "y", "SHOALMARK_NOPE": "z"})
    assert all(name in caught.value.message for name in ("_PORT", "_THREADS", "_NOPE"))


def test_certificate_and_key_belong_together(tmp_path):
    pem = tmp_path / "tower.pem"
    pem.write_text("certificate")
    with pytest.raises(SettingsError, match="set together"):
        load_settings({**HOME, "SHOALMARK_TLS_CERTIFICATE": str(pem)})


def test_the_database_url_may_stand_in_a_file(tmp_path):
    file = tmp_path / "url"
    file.write_text("postgresql://mill:secret@db/plant\n")
    environ = {**HOME, "SHOALMARK_DATABASE_URL_FILE": str(file)}
    settings = load_settings(environ)
    assert settings.database_url == "postgresql://mill:secret@db/plant"
    with pytest.raises(SettingsError, match="keep one"):
        load_settings({**environ, "SHOALMARK_DATABASE_URL": "sqlite:////tmp/x"})
    row = {row.name: row for row in describe(settings)}["SHOALMARK_DATABASE_URL"]
    assert (row.value, row.source) == ("postgresql://mill:***@db/plant", "file")


def test_what_is_in_force_is_described_without_secrets():
    url = "postgresql://mill:se%40cret@db:5433/plant?password=second&application_name=x"
    settings = load_settings({**HOME, "SHOALMARK_DATABASE_URL": url, "SHOALMARK_PORT": "8443"})
    rows = {row.name: row for row in describe(settings)}
    assert list(rows) == [setting.name for setting in TABLE]
    assert rows["SHOALMARK_DATABASE_URL"].value == (
        "postgresql://mill:***@db:5433/plant?password=***&application_name=x"
    )
    assert (rows["SHOALMARK_PORT"].value, rows["SHOALMARK_PORT"].source) == ("8443", "environment")
    assert (rows["SHOALMARK_HOST"].value, rows["SHOALMARK_HOST"].source) == ("127.0.0.1", "default")
    assert rows["SHOALMARK_TLS_KEY"].value == "not set"
    assert all(row.sentence.endswith(".") for row in rows.values())


@pytest.mark.parametrize(
    ("url", "shown"),
    [
        ("sqlite:////data/plant.sqlite3", "sqlite:////data/plant.sqlite3"),
        ("postgresql://mill@db/plant", "postgresql://mill@db/plant"),
        ("postgresql://mill:p@ss@db/plant", "postgresql://mill:***@db/plant"),
        ("postgresql://[broken:secret@db/plant", "***"),
    ],
)
def test_masks(url, shown):
    assert masked(url) == shown


def test_the_secret_key_is_made_once_for_the_owner_only(tmp_path):
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path / "new" / "folder")})
    key = secret_key(settings)
    file = settings.data_folder / "secret-key"
    assert len(key) == 32
    assert stat.S_IMODE(file.stat().st_mode) == 0o600
    assert secret_key(settings) == key
    assert [path.name for path in settings.data_folder.iterdir()] == ["secret-key"]


def test_processes_that_start_together_agree_on_the_secret_key(tmp_path):
    code = (
        "from service.settings import load_settings, secret_key\n"
        f"print(secret_key(load_settings({{'SHOALMARK_DATA_FOLDER': {str(tmp_path)!r}}})).hex())"
    )
    processes = [
        subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, text=True) for _ in range(4)
    ]
    assert len({process.communicate(timeout=30)[0] for process in processes}) == 1


@pytest.mark.parametrize(
    ("content", "mode", "message"),
    [
        ("ab" * 32, 0o644, "read by others"),
        ("ab" * 8, 0o600, "too short"),
        ("no key", 0o600, "cannot be used"),
    ],
)
def test_a_secret_key_that_is_no_secret_is_refused(tmp_path, content, mode, message):
    file = tmp_path / "secret-key"
    file.write_text(content)
    os.chmod(file, mode)
    with pytest.raises(SettingsError, match=message) as caught:
        secret_key(load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path)}))
    assert content not in caught.value.message


def test_a_demo_is_served_on_the_loopback_address_only() -> None:
    assert load_settings({**HOME, "SHOALMARK_DEMO": "yes"}).demo
    assert not load_settings(HOME).demo
    with pytest.raises(SettingsError, match="SHOALMARK_DEMO needs SHOALMARK_HOST"):
        load_settings({**HOME, "SHOALMARK_DEMO": "yes", "SHOALMARK_HOST": "0.0.0.0"})
    with pytest.raises(SettingsError, match="expected yes or no"):
        load_settings({**HOME, "SHOALMARK_DEMO": "perhaps"})
