"""Light curves along tracks, and all images of a point."""
