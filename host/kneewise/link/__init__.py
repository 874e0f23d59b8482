"""The link: ports, sessions and clocks. It moves messages and knows nothing of sweeps."""
