def scan_svg(scan):
    return ""
