"""Everything that touches the disk: readers that know places, writers that are atomic."""
