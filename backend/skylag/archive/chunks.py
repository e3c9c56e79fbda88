"""Arrays as compressed, checksummed bytes, and back.

The checksum covers the label, type and shape as well as the bytes, so that a chunk put in another's place is found out
too.  A chunk that fails its check is refused and never given.  Knows nothing of the database.
"""

import hashlib
import zlib
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from skylag.errors import FormatError

# Level 6 of zlib after putting the first bytes of all values together, then the second bytes, and so on: the upper
# bytes of neighbouring map values are alike and so take little room.
LEVEL = 6


@dataclass(frozen=True)
class Packed:
    """An array as bytes: numpy dtype name with byte order, shape as text like 12,15,17, and the checksum of it all."""

    dtype: str
    shape: str
    data: bytes
    sha256: str


def _digest(label: str, dtype: str, shape: str, data: bytes) -> str:
    checksum = hashlib.sha256(f"{label}\n{dtype}\n{shape}\n".encode())
    checksum.update(data)
    return checksum.hexdigest()


def pack(array: npt.NDArray[Any], label: str) -> Packed:
    """Bytes of an array of any shape and any plain number type; label says what and where it is, once and for all."""
    plain = np.ascontiguousarray(array)
    dtype = plain.dtype.newbyteorder("<").str
    flat = plain.astype(dtype, copy=False).reshape(-1)
    planes = flat.view(np.uint8).reshape(flat.size, plain.dtype.itemsize).T
    data = zlib.compress(planes.tobytes(), LEVEL)
    shape = ",".join(str(n) for n in array.shape)
    return Packed(dtype, shape, data, _digest(label, dtype, shape, data))


def unpack(packed: Packed, label: str) -> npt.NDArray[Any]:
    """The array again.  Raises FormatError where the bytes are not those that were packed under this label."""
    if _digest(label, packed.dtype, packed.shape, packed.data) != packed.sha256:
        raise FormatError(
            f"stored data of {label} do not match their checksum and are not used; "
            "restore the archive from a backup or process the day again",
            path=label,
            line=0,
        )
    dtype = np.dtype(packed.dtype)
    shape = tuple(int(n) for n in packed.shape.split(",") if n)
    planes = np.frombuffer(zlib.decompress(packed.data), dtype=np.uint8)
    flat = np.ascontiguousarray(planes.reshape(dtype.itemsize, -1).T).view(dtype)
    return flat.reshape(shape).astype(dtype.newbyteorder("="), copy=False)
