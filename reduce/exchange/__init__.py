"""Light curves in and out of files."""
