"""One case per published source: what it prints, and what a public function here returns."""
