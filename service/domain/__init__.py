"""What a decision means: batch <- specification <- policy <- record, and nothing of HTTP or storage."""
