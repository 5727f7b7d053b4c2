"""What the longer commands do, between the command line and the parts they bring together."""
