"""Settings, read once from the environment; every one has a default."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from service.errors import ConfigurationError

PREFIX = "ACCEPTANCE_"

SETTINGS = {
    "DATA": "Folder of the store and the key. Default: ./acceptance-data",
    "DATABASE_URL": "SQLAlchemy address of the store. Default: SQLite file store.sqlite in the data folder",
    "KEY_FILE": "Private record key, PKCS#8 PEM, mode 0600. Default: record-key.pem in the data folder",
    "KEY_PASSPHRASE_FILE": "File that holds the passphrase of an encrypted key. Default: none",
    "ISSUER": "Name of the laboratory as records state it. Default: Unnamed laboratory",
    "ORIGIN": "Name of the log that records belong to. Default: localhost/acceptance",
    "BODY_LIMIT": "Largest request body in bytes. Default: 8388608",
    "INLINE_SPECIFICATIONS": "Whether a batch may bring its whole specification: allowed or refused. Default: allowed",
}
"""Every setting without its prefix, with its meaning and default."""


@dataclass(frozen=True, slots=True)
class Settings:
    """What an operator decides.

    Parameters
    ----------
    database_url : str
        SQLAlchemy address of the store.
    key_file : Path
        Private record key.
    key_passphrase_file : Path or None
        Holds the passphrase of an encrypted key.
    issuer : str
        Name of the laboratory as records state it.
    origin : str
        Name of the log that records belong to.
    body_limit : int
        Largest request body in bytes.
    inline_specifications : bool
        Whether a batch may bring its whole specification.
    """

    database_url: str
    key_file: Path
    key_passphrase_file: Path | None
    issuer: str
    origin: str
    body_limit: int
    inline_specifications: bool

    @classmethod
    def from_environment(cls, environment: Mapping[str, str]) -> Settings:
        """Read the settings.

        Parameters
        ----------
        environment : mapping of str to str
            Usually ``os.environ``.

        Raises
        ------
        ConfigurationError
            Where a name that begins with ``ACCEPTANCE_`` is not a setting, or a value cannot be read.
        """
        given = {name.removeprefix(PREFIX): value for name, value in environment.items() if name.startswith(PREFIX)}
        unknown = sorted(set(given) - set(SETTINGS))
        if unknown:
            names = ", ".join(PREFIX + name for name in unknown)
            known = ", ".join(PREFIX + name for name in SETTINGS)
            raise ConfigurationError(f"Not a setting: {names}. The settings are {known}.")
        data = Path(given.get("DATA", "acceptance-data")).resolve()
        passphrase_file = given.get("KEY_PASSPHRASE_FILE")
        return cls(
            database_url=given.get("DATABASE_URL", f"sqlite:///{data / 'store.sqlite'}"),
            key_file=Path(given.get("KEY_FILE", str(data / "record-key.pem"))),
            key_passphrase_file=Path(passphrase_file) if passphrase_file else None,
            issuer=given.get("ISSUER", "Unnamed laboratory"),
            origin=given.get("ORIGIN", "localhost/acceptance"),
            body_limit=_positive(given.get("BODY_LIMIT", "8388608"), "BODY_LIMIT"),
            inline_specifications=_choice(given.get("INLINE_SPECIFICATIONS", "allowed")),
        )


def _positive(text: str, name: str) -> int:
    if not text.isascii() or not text.isdigit() or int(text) < 1:
        raise ConfigurationError(f"{PREFIX}{name} is {text!r}; give a whole number above 0.")
    return int(text)


def _choice(text: str) -> bool:
    if text not in ("allowed", "refused"):
        raise ConfigurationError(f"{PREFIX}INLINE_SPECIFICATIONS is {text!r}; give allowed or refused.")
    return text == "allowed"
