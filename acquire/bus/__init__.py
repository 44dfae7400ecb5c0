"""The bus: streams of rows from publishers to subscribers, and small requests, over ZeroMQ.

On loopback anybody on this computer may take part; beyond it both sides know each other by key.
Nothing outside this package touches a ZeroMQ socket. Each object has a context of its own, made
after its process has started, and ends it when it is closed.
"""

from acquire.bus.addresses import Endpoint, free_address, free_endpoints
from acquire.bus.inbox import Inbox, ask
from acquire.bus.introduction import Introducer, RoundTrip
from acquire.bus.progress import StreamHealth
from acquire.bus.publisher import Publisher
from acquire.bus.subscriber import Subscriber
from acquire.bus.wire import Introduction

__all__ = [
    "Endpoint",
    "Inbox",
    "Introducer",
    "Introduction",
    "Publisher",
    "RoundTrip",
    "StreamHealth",
    "Subscriber",
    "ask",
    "free_address",
    "free_endpoints",
]
