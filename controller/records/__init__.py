"""Records: written, read, verified, watched again and looked up; whoever made them."""
