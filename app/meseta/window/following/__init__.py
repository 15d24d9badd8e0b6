"""Following a folder while an experiment writes into it: looks off the window's thread, and what is said of them."""

from meseta.window.following.follower import Follower
from meseta.window.following.left_out import LeftOut
from meseta.window.following.line import FollowLine

__all__ = ["FollowLine", "Follower", "LeftOut"]
