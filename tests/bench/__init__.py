"""Speed and memory, each beside a bare baseline measured in the same run. `make bench`."""
