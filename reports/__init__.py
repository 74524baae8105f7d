"""What people read and run: limits, figures, page, paper, exports, runs, command line."""
