"""A content hash of this folder: every cached kernel closes over it, so that an edit of any file here recompiles all of them.

The compiler's own cache looks only at the file a kernel is written in; called kernels and constants of other files would go stale.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Final


def _content_hash() -> int:
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.name.encode())
        digest.update(path.read_bytes())
    return int.from_bytes(digest.digest()[:7], "little")


STAMP: Final = _content_hash()
