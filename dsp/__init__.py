"""Signal processing of links: samples in, eyes and figures out. No files, sockets, clocks or threads."""
