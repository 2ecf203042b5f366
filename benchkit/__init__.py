"""What is known and decided: files, parts, circuit, heat, prediction, fits, judgement, guard,
records and reports. Opens no connection and never sleeps on its own."""
