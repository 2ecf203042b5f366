"""The run folder: written as things happen, read back to judge, rebuilt into reports."""
