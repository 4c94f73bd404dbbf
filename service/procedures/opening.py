"""Open a site from its settings: store, key, null laws; and begin its log where it is new."""

from __future__ import annotations

from service.config import Settings
from service.domain import record
from service.errors import KeyUnavailableError
from service.procedures.site import Site
from service.procedures.tokens import OPERATOR
from service.signing import keys
from service.signing.envelope import sign
from service.stats.null_laws import NullLaws
from service.storage.store import Columns, Store


def open_site(settings: Settings) -> Site:
    """Open store and key; make the key where the store has no record yet.

    Parameters
    ----------
    settings : Settings
        What the operator decided.

    Returns
    -------
    Site
        Ready for every use case.

    Raises
    ------
    StoreUnavailableError
        Where the store is missing, behind this program, or not as it was made.
    KeyUnavailableError
        Where the key cannot be read, is open to others, or is missing though the store has records.
    """
    store = Store.open(settings.database_url)
    signer = _signer(settings, store)
    site = Site(
        store=store,
        signer=signer,
        trusted=keys.trusted_keys(keys.jwks([signer.public_key])),
        null_laws=NullLaws(load=store.load_null_table, save=store.save_null_table),
        issuer=settings.issuer,
        origin=settings.origin,
        inline_specifications=settings.inline_specifications,
    )
    _begin_log(site)
    return site


def _signer(settings: Settings, store: Store) -> keys.Signer:
    if not settings.key_file.exists():
        with store.reading() as view:
            if view.has_records():
                raise KeyUnavailableError(
                    f"The key {settings.key_file} is missing, but the store has records signed by it. Restore the key; "
                    "a new one is never made in its place."
                )
        keys.create_key(settings.key_file)
    passphrase = settings.key_passphrase_file
    return keys.load_signer(settings.key_file, passphrase.read_bytes().strip() if passphrase else None)


def _begin_log(site: Site) -> None:
    """Write the first record, which names the log and the key that signs it."""
    with site.store.reading() as view:
        if view.has_records():
            return
    with site.store.transaction() as tx:
        if tx.has_records():
            return
        heading = site.heading(OPERATOR, "operator")
        payload = record.event(heading, "log-opened", record_key=keys.jwk(site.signer.public_key))
        columns = Columns(
            record_id=heading.record_id,
            record_type="log-opened",
            recorded_at=heading.at,
            actor=OPERATOR.subject,
        )
        tx.add_record(sign(payload, site.signer), columns)
