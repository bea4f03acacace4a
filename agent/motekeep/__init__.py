"""motekeep: the agent on the gateway that makes the numbers of laser dust sensors answerable.

The folders are the way of the data: `wire` (bytes to frames), `measure` (frames to readings), `health`
(what is wrong, since when), `message` (what leaves the device), `edges` (one outside thing a file),
`loops` (move data between edges). `pipeline` composes the pure rooms; `app` wires everything.
"""

__version__ = "0.1.0"
