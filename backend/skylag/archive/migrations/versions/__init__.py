"""One step per file, numbered; a step that was published is never edited, a new one is written after it."""
