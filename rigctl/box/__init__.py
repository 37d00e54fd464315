"""What a trigger box is, as pure code: bytes in → bytes out under a count of ticks.

The simulated rig's box and any host-timed adapter are this core; firmware in other languages does
the same and is held to it by one suite of tests.
"""

from rigctl.box.core import Box, BoxConfig, Edge

__all__ = ["Box", "BoxConfig", "Edge"]
