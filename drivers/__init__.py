"""Hardware behind Evenarm: contracts, registry and one file for each device family."""
