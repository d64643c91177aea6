"""Lines of CSV by the compiled writer; by pandas where that is not installed (other digits for the same numbers)."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["column_lines", "header_line", "number_lines", "pattern_lines", "writer_name"]

Array = npt.NDArray[np.float64]


def writer_name() -> str:
    """Name and version of what writes the lines; bytes depend on it."""
    try:
        import pyarrow as pa
    except ImportError:
        import pandas as pd

        return f"pandas {pd.__version__}"
    return f"pyarrow {pa.__version__}"


def header_line(names: Sequence[str]) -> bytes:
    """First line of a table."""
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerow(names)
    return text.getvalue().encode()


def column_lines(columns: Mapping[str, Any], path_or_file: Any) -> None:
    """Write columns of text, whole numbers and numbers (nan is an empty cell), without a header."""
    try:
        import pyarrow as pa
        from pyarrow import csv as arrow_csv
    except ImportError:
        import pandas as pd

        frame = pd.DataFrame(dict(columns))
        frame.to_csv(
            path_or_file, index=False, header=False, na_rep="", lineterminator="\n", quoting=csv.QUOTE_NONNUMERIC
        )
        return
    arrays = [_arrow(c) for c in columns.values()]
    table = pa.Table.from_arrays(arrays, names=[str(i) for i in range(len(arrays))])
    options = arrow_csv.WriteOptions(include_header=False, batch_size=4096)
    if isinstance(path_or_file, Path):
        with path_or_file.open("wb") as file:
            arrow_csv.write_csv(table, file, options)
    else:
        arrow_csv.write_csv(table, path_or_file, options)


def _arrow(column: Any) -> Any:
    import pyarrow as pa

    values = np.ascontiguousarray(column) if isinstance(column, np.ndarray) else column
    if isinstance(values, np.ndarray) and values.dtype.kind == "f":
        return pa.array(values, mask=np.isnan(values))
    return pa.array(values.tolist() if isinstance(values, np.ndarray) and values.dtype.kind == "U" else values)


def number_lines(labels: npt.NDArray[np.str_], values: Array, path: Path) -> None:
    """Write a label and numbers a line; `values` of shape (v, N)."""
    column_lines({"label": labels, **{str(i): v for i, v in enumerate(values)}}, path)


def pattern_lines(labels: npt.NDArray[np.str_], values: Array, which: npt.NDArray[np.int64], path: Path) -> None:
    """Write a label and the numbers of one of P rows a line; each row is put into text once."""
    text = io.BytesIO()
    column_lines({str(i): v for i, v in enumerate(values.T)}, text)
    rows = [b"," + line for line in text.getvalue().split(b"\n")[: len(values)]]
    quoted = [b'"' + label.replace('"', '""').encode() + b'"' for label in labels.tolist()]
    with path.open("wb") as file:
        file.writelines(q + rows[p] + b"\n" for q, p in zip(quoted, which.tolist(), strict=True))
