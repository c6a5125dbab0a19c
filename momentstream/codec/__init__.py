"""The byte format: one writer, one suspicious reader, and the registry of kinds.

All numbers are little-endian, doubles IEEE 754.  Every state is one frame:

=======  ==========  ==========================================================================
offset   type        meaning
=======  ==========  ==========================================================================
0        8 bytes     magic: ``93 6D 73 74 61 74 65 0A`` ("\\x93mstate\\n")
8        uint16      format version, now 1
10       uint16      kind: 1 Moments, 2 ExactMoments, 3 JointMoments (their payloads are described
                     by ``accumulators.moments_payload``, ``exact_moments``, ``joint_payload``)
12       uint32      flags; 1: working state, to be continued bit for bit; 0: settled state
16       uint64      n, the length of the payload
24       n bytes     payload
24 + n   uint32      CRC-32 (zlib, IEEE 802.3) of all bytes before it
=======  ==========  ==========================================================================

Inside a payload, a text is a uint32 length and that many bytes of UTF-8; an array of doubles
stands without a length, which follows from what came before.  A NaN is always written as
``00 00 00 00 00 00 F8 7F``.
"""

from .frames import CONTINUED, Reader, Writer, decode, encode, register

__all__ = ["CONTINUED", "Reader", "Writer", "decode", "encode", "register"]
