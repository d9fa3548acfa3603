"""One verb per file, one public function each."""
