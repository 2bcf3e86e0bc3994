"""The store: channel lists, ready time, file headers and lazy reading of samples."""

from dq.store.channels import Channel, read_channel_list
from dq.store.headers import Problem
from dq.store.index import Store, open_store
from dq.store.lists import read_injections, read_labels, read_ready, read_triggers
from dq.store.reader import ChannelData, Series

__all__ = [
    "Channel",
    "ChannelData",
    "Problem",
    "Series",
    "Store",
    "open_store",
    "read_channel_list",
    "read_injections",
    "read_labels",
    "read_ready",
    "read_triggers",
]
