"""Bad tables and sidecars by the part that is at fault."""
