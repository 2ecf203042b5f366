"""Reports of a run and of a lot: self-contained HTML, made from the record and its evaluation."""
