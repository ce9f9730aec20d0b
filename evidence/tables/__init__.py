"""Tables: CSV, Parquet, DataFrame, xarray Dataset, dict -> named arrays, checked.

``named.py`` is the result, ``flaws.py`` words what is wrong, ``columns.py`` turns one column
into an array, ``csv_file.py`` reads text, ``sources.py`` tells the kinds of data apart.
"""

from evidence.tables.named import NamedArrays, fingerprint
from evidence.tables.sources import named_arrays, read_data

__all__ = ["NamedArrays", "fingerprint", "named_arrays", "read_data"]
