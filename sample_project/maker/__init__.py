"""The parts of make_sample.py: landscape, scene, training polygons, first map and reference sample."""
