"""Pages: what a job did, as one HTML file that needs nothing else and fetches nothing."""
