"""What keeps work from being lost: a journal of every edit beside the project, and a log of faults."""
