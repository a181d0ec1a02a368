"""One day of a site, computed: 1-minute figures, beside a script with pandas and PropsSI.

    python benchmarks/siteday.py

The benchmarks' site (`plant.py`: 60 tags, 25 streams, 12 pieces of equipment), 1440 cells, from
readings in memory to figures in memory: neither reads a file nor writes a store. lostwork does more
than the script (`byhand.py`) in that time: checks of readings, flags, steadiness, uncertainties,
states kept. Best CPU seconds of three, all in one run: compare the ratios.
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import byhand
import numpy as np
import pandas as pd
import plant

from connectors.base import Quality, ReadResult
from monitor.figures import compute, lead_in
from monitor.site.load import load_site

REPEATS = 3


def best(call):
    times = []
    for _ in range(REPEATS):
        begun = time.process_time()
        call()
        times.append(time.process_time() - begun)
    return min(times)


def site_of():
    with tempfile.TemporaryDirectory() as place:
        path = Path(place) / "site.toml"
        path.write_text(plant.site_text(1), encoding="utf-8")
        return load_site(path)


def main():
    site, start = site_of(), plant.START + plant.DAY
    first = start - lead_in(site)
    minutes = (start + plant.DAY - first) // plant.MINUTE + 1
    names, values = plant.readings(first, minutes)
    stamps = pd.to_datetime(np.arange(minutes) * plant.MINUTE + first, unit="s", utc=True)
    flat = values.T.ravel()
    long = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(np.repeat(np.arange(len(names)), minutes), names),
            "time": np.tile(stamps.as_unit("us"), len(names)),
            "value": np.nan_to_num(flat),
            "quality": np.where(np.isnan(flat), Quality.BAD, Quality.GOOD).astype(np.uint8),
        }
    )
    own = best(lambda: compute(site, ReadResult(long), start, start + plant.DAY))
    inside = (long["time"] >= stamps[-1441]) & (long["quality"] == Quality.GOOD)
    day = long[inside & (long["time"] < stamps[-1])].astype({"tag": "str"})
    found = {"lostwork": own}
    for title, fluid in (("script, IF97", "IF97::Water"), ("script, default engine", "Water")):
        found[title] = best(lambda f=fluid: byhand.figures(byhand.gridded(day, 1), f))
    for title, seconds in found.items():
        print(f"{title:24s} {seconds:6.2f} s   {seconds / own:5.1f} x lostwork")


if __name__ == "__main__":
    main()
