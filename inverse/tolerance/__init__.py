"""What the shop does to a design: errors of parts, and the share of builds that still do what was asked."""
