"""Everything a reader sees; computes nothing but layout."""
