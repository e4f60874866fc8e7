"""The command line: settings, verbs, run folders, progress.  Only this room imports hydra."""
