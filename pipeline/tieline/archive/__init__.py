"""Many sessions at once: every configuration below a folder, reduced by worker processes, one dataset of results."""
