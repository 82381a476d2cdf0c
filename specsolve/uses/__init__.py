"""What results are for: cross-checking published values, cluster members for age fitting, rehearsing an observation."""
