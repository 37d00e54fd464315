"""Closed-loop pairing control: say when events should meet at the synapse, log what really did.

The rooms of this package are described in ``DEVELOPERS.md``.
"""

__version__ = "0.1.0"
