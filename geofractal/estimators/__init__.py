"""The shipped measures, one file per family; loaded through the entry-point group like any other."""
