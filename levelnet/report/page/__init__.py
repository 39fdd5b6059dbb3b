"""Results as one page of HTML: what was asked, what came out, how far to trust it, what to cite."""
