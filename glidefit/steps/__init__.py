"""The analysis: one public function a step, no step imports another."""
