"""The ``crossing`` command: one file a verb; parses, calls one public function, prints."""
