"""Venous-pressure stages: one public function a file, named like the file."""
