"""A job from case file to verdict: reading, running, storing, figures, report, command line."""
