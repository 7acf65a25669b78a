"""The demo's result in one JSON line, and as an exit code.

    demo_summary.py FIGURES.jsonl LOOKOUT.json

Exit code 0 only if every cart is settled with at most 2 m RMS over the second half; the flyer is told,
not judged.
"""

import json
import sys

RMS_MAX_M = 2.0


def main(figures_path, lookout_path):
    with open(figures_path, encoding="utf-8") as lines:
        figures = {row["tag"]: row for row in map(json.loads, lines)}
    with open(lookout_path, encoding="utf-8") as text:
        heard = json.load(text)["tags"]
    tags = {}
    for name in sorted(figures.keys() | heard.keys()):
        row, seen = figures.get(name, {}), heard.get(name, {})
        tags[name] = {
            "standing": row.get("standing", "silent"),
            "position_rms_m": row.get("position_rms_m"),
            "messages": seen.get("messages", 0),
            "worst_latency_ms": seen.get("worst_latency_ms"),
        }
    carts = {name: tag for name, tag in tags.items() if name.startswith("cart-")}
    bad = [name for name, tag in carts.items()
           if tag["standing"] != "settled" or tag["position_rms_m"] is None or tag["position_rms_m"] > RMS_MAX_M]
    good = bool(carts) and not bad
    print(json.dumps({"good": good, "not_good": bad, "rms_max_m": RMS_MAX_M, "tags": tags}))
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))
