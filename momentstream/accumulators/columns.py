"""Foreign columns and frames, read through their own methods: values plus mask.

Nothing is imported for them, and nothing passes through a floating copy: integers keep all their
digits, and a null is a mask entry, not a number.
"""

import sys

import numpy as np

from .conversion import refuse_type


def origin(value):
    """The package a value's type comes from."""
    return type(value).__module__.partition(".")[0]


def check_dtype(array):
    """Refuse arrays that do not hold real numbers of at most 64 bits."""
    kind = array.dtype.kind
    if kind in "biuf" and array.dtype.itemsize <= 8:
        return array
    name = str(array.dtype)
    cure = {
        "c": "feed its real and imaginary parts apart",
        "O": 'convert it first, say with .astype("float64")',
        "U": 'convert it first, say with .astype("float64")',
        "S": 'convert it first, say with .astype("float64")',
        "M": 'feed integers, say with .astype("int64")',
        "m": 'feed integers, say with .astype("int64")',
        "f": 'round it to double precision first, with .astype("float64")',
    }.get(kind, "feed real numbers")
    raise TypeError(f"values must be real numbers of at most 64 bits, got dtype {name}; {cure}")


# What columns of other libraries call the types that are taken.
_REAL_TYPES = {
    *("bool", "boolean", "null"),
    *("int8", "int16", "int32", "int64", "uint8", "uint16", "uint32", "uint64"),
    *("halffloat", "float16", "float", "float32", "double", "float64"),
}


def read_column(values):
    """An array of real numbers, and a mask of what is missing (or None).

    Parameters
    ----------
    values
        A NumPy array (masked too), a pandas, Polars or Arrow column, or anything with
        ``__array__`` or a buffer.
    """
    package = origin(values)
    masked = sys.modules.get("numpy.ma")
    if masked is not None and isinstance(values, masked.MaskedArray):
        mask = masked.getmask(values)
        return check_dtype(masked.getdata(values)), None if mask is masked.nomask else mask
    if package == "pandas" and hasattr(values, "dtype"):
        return _read_pandas(values)
    if package == "polars" and hasattr(type(values), "dtype"):
        return _read_nullable(values, values.dtype, values.null_count())
    if package == "pyarrow" and hasattr(values, "null_count"):
        return _read_nullable(values, values.type, values.null_count)
    if package in ("pandas", "polars", "pyarrow"):
        raise refuse_type(values)
    return check_dtype(np.asarray(values)), None


def _read_pandas(values):
    dtype = values.dtype
    if isinstance(dtype, np.dtype):
        return check_dtype(np.asarray(values)), None
    plain = getattr(dtype, "numpy_dtype", None)
    if plain is None or plain.kind not in "biuf":
        if getattr(getattr(dtype, "subtype", None), "kind", "") in ("b", "i", "u", "f"):
            return check_dtype(np.asarray(values)), None
        raise TypeError(f"values must be real numbers, got a column of dtype {dtype}")
    mask = np.asarray(values.isna())
    if not mask.any():
        return check_dtype(values.to_numpy(dtype=plain)), None
    return check_dtype(values.to_numpy(dtype=plain, na_value=plain.type(0))), mask


def _read_nullable(values, dtype, null_count):
    """Columns with a validity bitmap: nulls are filled, and marked in a mask."""
    kind = str(dtype).lower()
    if kind not in _REAL_TYPES:
        # Arrays and dictionaries of numbers are numbers too, where nothing is null.
        try:
            if not null_count and not kind.startswith("struct"):
                return check_dtype(_plain_array(values)), None
        except Exception:
            pass
        raise TypeError(
            f"values must be real numbers of at most 64 bits, got a column of type {dtype}"
        )
    if kind == "null":
        return np.zeros(len(values)), np.ones(len(values), dtype=bool)
    if not null_count:
        return check_dtype(_plain_array(values)), None
    filled = values.fill_null(False if kind.startswith("bool") else 0)
    mask = np.asarray(_plain_array(values.is_null()), dtype=bool)
    return check_dtype(_plain_array(filled)), mask


def _plain_array(values):
    # Single Arrow arrays must be told that they may copy; chunked ones always do.
    if origin(values) == "pyarrow" and not hasattr(values, "chunks"):
        return np.asarray(values.to_numpy(zero_copy_only=False))
    return np.asarray(values.to_numpy())


def is_frame(values):
    """Whether a value is a table of named columns."""
    # Asked of the class: on some lazy tables the attribute itself is work, or a warning.
    kind = type(values)
    if hasattr(kind, "column_names") and hasattr(kind, "column"):
        return True
    return hasattr(kind, "columns") and (hasattr(kind, "iloc") or hasattr(kind, "get_columns"))


def frame_names(values):
    """The names of a frame's columns."""
    own = getattr(values, "column_names", None)
    return [str(name) for name in (values.columns if own is None else own)]


def read_frame(values, names, size):
    """The columns of a frame in the order of ``names`` (its own where None), values and masks."""
    own = frame_names(values)
    if len(set(own)) != len(own):
        raise ValueError(f"the frame has two columns of one name: {own}")
    if names is not None:
        missing = [name for name in names if name not in own]
        extra = [name for name in own if name not in names]
        if missing or extra:
            raise ValueError(
                f"the frame's columns do not match the names: missing {missing}, extra {extra}; "
                f"select {list(names)} first"
            )
    elif size is not None and len(own) != size:
        raise ValueError(f"the frame has {len(own)} columns, the accumulator {size} channels")
    places = range(len(own)) if names is None else [own.index(name) for name in names]
    return [read_column(_column_at(values, place)) for place in places]


def _column_at(values, place):
    if hasattr(values, "iloc"):
        return values.iloc[:, place]
    if hasattr(values, "get_columns"):
        return values.get_columns()[place]
    return values.column(place)
