"""Perception by echo with two ears: from raw pings to obstacle positions and a local map."""

from pkgutil import extend_path

# The generated messages (ros_echo_perception.msg) may lie in another folder of the import path than
# the modules here, as they do when the checkout is used directly. Both count as one package.
__path__ = extend_path(__path__, __name__)

__version__ = "0.1.0"
