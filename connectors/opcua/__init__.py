"""OPC UA: reading a plant's server, and serving our own.

The library's own log is kept off standard error unless a site asks for it by configuring logging: everything
that happens to a connection is told in events and errors of our own.
"""

from __future__ import annotations

import logging

logging.getLogger("asyncua").addHandler(logging.NullHandler())
