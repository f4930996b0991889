"""Files to arrays: runs, nuisance bases, the group design, region labels."""
