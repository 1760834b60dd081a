"""Many recordings of one study: manifest, runs that resume, summary."""
