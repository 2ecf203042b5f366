"""What the datasheets promise of a stage, before anything is measured."""
