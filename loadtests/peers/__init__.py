"""Feed reads timed side by side with what one would otherwise put together: `python -m loadtests.peers`."""
