"""Export layouts that the tool reads, one file each; found through the entry points `vop.readers`."""
