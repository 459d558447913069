"""Which measured stars are held out, by a rule that knows nothing of their diameters."""

import hashlib

__all__ = ["is_held_out"]


def is_held_out(hip: int | str) -> bool:
    """Whether the star of that HIP number may not be used to choose defaults; see README.md."""
    return int(hashlib.sha256(f"HIP {int(hip)}".encode()).hexdigest()[-1], 16) % 2 == 0
