"""From a network and its conditions to curves and sensitivities."""
