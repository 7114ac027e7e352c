"""The shortlist as Parquet, with a unit per column."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from capmuster.rank.shortlist import Shortlist


def to_parquet(shortlist: Shortlist) -> bytes:
    """One row per candidate; units in the fields' metadata, version and fingerprints in columns and metadata.

    Raises
    ------
    CapmusterError
        When pyarrow is not installed.
    """
    try:
        import pyarrow as pa  # noqa: PLC0415 -- an optional extra
        import pyarrow.parquet as pq  # noqa: PLC0415
    except ImportError:
        raise CapmusterError(
            "to: Parquet needs the package pyarrow",
            accepted="pip install 'capmuster[parquet]', or another suffix",
        ) from None
    frame = shortlist.frame.assign(**shortlist.provenance)
    units = shortlist.frame.attrs["units"]
    table = pa.Table.from_arrays(
        [pa.array(frame[name].tolist()) for name in frame.columns],
        schema=pa.schema(
            [
                pa.field(name, pa.array(frame[name].tolist()).type, metadata={"unit": units.get(name, "")})
                for name in frame.columns
            ],
            metadata=shortlist.provenance,
        ),
    )
    out = io.BytesIO()
    pq.write_table(table, out)
    return out.getvalue()
