"""Pictures and reports: `page` assembles one self-contained HTML file, `charts` draws its panels."""
