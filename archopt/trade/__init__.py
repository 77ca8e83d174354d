"""Questions asked of a front: baselines, knee, losing topologies, leverage."""
