"""Summary and report: one JSON record and one offline HTML file."""
