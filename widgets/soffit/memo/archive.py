"""Office files are zip archives; this gives them the same bytes whenever they are written."""

from __future__ import annotations

import io
import zipfile

__all__ = ["without_clock"]

_EPOCH = (1980, 1, 1, 0, 0, 0)


def without_clock(data: bytes) -> bytes:
    """Pack a zip archive again with one fixed time on every entry.

    Parameters
    ----------
    data : bytes
        A zip archive.

    Returns
    -------
    bytes
        The same entries in the same order.
    """
    target = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(data)) as source, zipfile.ZipFile(target, "w") as packed:
        for entry in source.infolist():
            info = zipfile.ZipInfo(entry.filename, _EPOCH)
            info.compress_type = zipfile.ZIP_DEFLATED
            info.external_attr = 0o600 << 16
            packed.writestr(info, source.read(entry))
    return target.getvalue()
