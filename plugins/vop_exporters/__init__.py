"""Hand-off formats that the tool writes, one file each; found through the entry points `vop.exporters`."""
