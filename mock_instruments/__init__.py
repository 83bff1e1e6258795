"""A simulated bench: one coupled physics world behind nine instruments on TCP, for any client.

Takes a plain mapping of SI numbers (`WorldSpec.from_mapping`), gives instruments on loopback ports
(`serve`, in this process; `launch`, as one of its own), a control socket for its time and its ledger, and
the truth about its parts for accuracy studies (`truth`). It knows nothing of plans, drivers or records.
`Bench` is the same without sockets.
"""

from mock_instruments.bench import ROLES, Bench
from mock_instruments.launch import Launched, launch
from mock_instruments.server import Served, serve
from mock_instruments.spec import WorldSpec
from mock_instruments.truth import truth
from mock_instruments.world import World

__all__ = ["ROLES", "Bench", "Launched", "Served", "World", "WorldSpec", "launch", "serve", "truth"]
