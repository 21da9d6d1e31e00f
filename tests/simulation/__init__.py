"""Random commands from several processes, held against a model in memory."""
