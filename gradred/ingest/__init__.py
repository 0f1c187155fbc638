"""Files → parts: each reader refuses what it cannot vouch for."""
