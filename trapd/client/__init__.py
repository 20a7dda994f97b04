"""The Python client: what the command line and the console use, and any script may.

    from trapd.client import Client

    with Client() as trap:
        trap.set({"endcaps": 121.0}, why="centre the ion")

Everything it raises is in `trapd.errors`.
"""

from trapd.client.client import Client
from trapd.client.following import JsonEntry

__all__ = ["Client", "JsonEntry"]
