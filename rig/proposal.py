"""The setup lines that a stream suggests: what `identify` prints to begin a setup with."""

from acquisition.stream import StreamInfo


def setup_lines(info: StreamInfo, measured_rate: float | None) -> str:
    """TOML lines for a stream; they load as a setup as they stand."""
    lines = ["[logger]"]
    if info.format in ("crestwire", "text", "raw"):
        lines.append(f'format = "{info.format}"')
    if info.format == "raw":
        lines += [
            f'type = "{info.sample_type}"',
            f"channels = {len(info.channels)}",
            f'byte_order = "{info.byte_order or "little"}"',
        ]
    if info.rate is None and measured_rate is not None:
        lines.append(f"# measured from arrival: {measured_rate:.6g} sets a second")
        lines.append(f"# rate_hz = {measured_rate:.6g}")
    for n, hint in enumerate(info.channels, 1):
        name = hint.name.replace("\\", "").replace('"', "")
        lines += ["", "[[channel]]", f"input = {n}", f'name = "{name}"']
        if hint.gain is None:
            lines += [
                "# what one code is worth, and what to add to a code to make it zero:",
                '# unit = "V"',
                "# gain = 0.1",
                "# offset_codes = -2048",
            ]
    return "\n".join(lines)
