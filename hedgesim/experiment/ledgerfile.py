"""Every component of every path as a file."""

from pathlib import Path
from typing import Any

import numpy as np

from hedgesim.engine.ledger import Ledger


def write_ledger(ledger: Ledger, shown: tuple[str, ...], folder: Path) -> None:
    """Components of every path under the `shown` schedules: ledger.parquet with pyarrow, ledger.npz without."""
    if ledger.detail is None or ledger.trades_detail is None or ledger.turnover_detail is None:
        return
    rows = [ledger.schedules.index(name) for name in shown]
    detail = ledger.detail[rows]
    schedules, underlyings, _, paths = detail.shape
    columns: dict[str, Any] = {
        "schedule": np.repeat(np.array(shown), paths),
        "path": np.tile(np.arange(paths), schedules),
        "total": ledger.totals[rows].reshape(-1),
        "trades": ledger.trades_detail[rows].reshape(-1),
        "turnover": ledger.turnover_detail[rows].reshape(-1),
    }
    for c, name in enumerate(ledger.components):
        columns[name] = detail[:, :, c].sum(axis=1).reshape(-1)
        if underlyings > 1:
            for u, underlying in enumerate(ledger.underlyings):
                columns[f"{underlying}.{name}"] = detail[:, u, c].reshape(-1)
    try:
        import pyarrow as pa
        import pyarrow.parquet as pq
    except ImportError:
        np.savez_compressed(folder / "ledger.npz", **columns)
        return
    columns["schedule"] = pa.DictionaryArray.from_arrays(
        pa.array(np.repeat(np.arange(schedules), paths).astype(np.int32)), pa.array(shown)
    )
    pq.write_table(pa.table(columns), folder / "ledger.parquet", compression="zstd")
