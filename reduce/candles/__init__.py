"""Light curves to distances."""
