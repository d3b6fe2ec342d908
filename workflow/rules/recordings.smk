# Recordings in object storage and on web servers: the sessions table names addresses, and the planning, which reads
# recordings before there is a graph, asks the engine's storage plugins for them. Jobs read the local copies.

import importlib.util

from snakemake.exceptions import WorkflowError

from odograph.errors import InputError
from odograph.provenance.fetching import fetch_recordings
from odograph.provenance.remote import HttpRemote, S3Remote

_PLUGINS = {
    "s3": ("s3", S3Remote),
    "http": ("http", HttpRemote),
    "https": ("http", HttpRemote),
}


def stored(address):
    """A recording as its storage plugin shows it; the plugin is loaded with the first address that needs it."""
    name, remote = _PLUGINS[address.partition("://")[0].lower()]
    if importlib.util.find_spec(f"snakemake_storage_plugin_{name}") is None:
        raise InputError(
            f"the plugin that fetches it is not installed (snakemake-storage-plugin-{name})",
            file=address,
            expected="the plugin, since the sessions table names an address",
            remedy=f"pip install snakemake-storage-plugin-{name}",
        )
    try:
        found = getattr(storage, name)(address)
    except (WorkflowError, ValueError):
        # What the plugin says may repeat its settings, and the credentials are among them.
        raise InputError(
            "its storage plugin refuses its settings or the address",
            file=address,
            expected=f"settings that snakemake-storage-plugin-{name} can use",
            remedy=f"see to the options --storage-{name}-... and the variables SNAKEMAKE_STORAGE_{name.upper()}_...",
        ) from None
    return remote(found.flags["storage_object"])


def fetch(addresses):
    """Bring the local copies up to date; returns a finding for every address that there is no copy of."""
    return fetch_recordings({address: stored(address) for address in addresses})
