"""The upper storey, back at base: streams, searching, gathering, fitting, contests and reports."""
