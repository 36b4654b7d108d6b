"""Which links the tests run over, and the limits they run with."""

from protobench.links import Limits

LIMITS = Limits(inbox_bytes=1 << 20, send_s=0.4, open_s=1.0, answer_s=0.4)
KINDS = ("memory", "lockstep", "run", "tcp", "udp", "zmq+tcp", "zmq+ipc", "serial", "serial-socket")
# A far end in memory cannot go; one that is no plain stream cannot block on us, nor we on it.
CLOSABLE = ("lockstep", "run", "tcp", "udp", "zmq+tcp", "zmq+ipc", "serial", "serial-socket")
BLOCKING = ("run", "tcp", "serial", "serial-socket")
