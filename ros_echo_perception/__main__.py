"""``python -m ros_echo_perception``: the offline commands."""

from .offline.cli import main

if __name__ == "__main__":
    main()
