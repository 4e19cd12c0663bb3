"""The demonstration: an invented parcel depot, from the scanners' files to groups that other people can rely on."""
