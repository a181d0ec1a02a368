"""The exergy flows of a whole mill: forty-seven streams, as a real site file gives them.

Mean rates of the demo site over two months, rounded to 0.1 kW.
"""

from __future__ import annotations

from dashboards.views import FlowLink

STREAMS = (
    ("from:gas", "B1", "Natural gas", 46335.1, "fuel"),
    ("FWM", "B1", "Feed water to the gas boiler", 1593.8, "water"),
    ("B1", "HDR62", "Steam of the gas boiler", 21841.4, "water"),
    ("B1", "lost", "Blowdown of the gas boiler", 68.5, "lost"),
    ("B1", "lost", "Stack and casing of the gas boiler", 981.6, "lost"),
    ("from:bark", "B2", "Bark", 66903.2, "fuel"),
    ("FWM", "B2", "Feed water to the bark boiler", 1972.0, "water"),
    ("B2", "HDR62", "Steam of the bark boiler", 26597.5, "water"),
    ("B2", "lost", "Blowdown of the bark boiler", 112.3, "lost"),
    ("B2", "lost", "Stack and casing of the bark boiler", 2827.4, "lost"),
    ("HDR62", "TG1", "Steam to TG1", 35545.8, "water"),
    ("HDR62", "TG2", "Steam to TG2", 12481.8, "water"),
    ("HDR62", "LD62", "Steam to let-down 62", 278.2, "water"),
    ("TG1", "HDR12", "Extraction of TG1", 4468.9, "water"),
    ("TG1", "HDR4", "Exhaust of TG1", 17053.7, "water"),
    ("TG1", "used", "Power of TG1", 11939.9, "power"),
    ("TG2", "COND", "Exhaust of TG2", 2008.4, "water"),
    ("TG2", "used", "Power of TG2", 8158.6, "power"),
    ("from:cooling_in", "COND", "Cooling water in", 799.4, "water"),
    ("COND", "lost", "Cooling water out", 1862.1, "lost"),
    ("COND", "CEP", "Condensate in the hotwell", 64.7, "water"),
    ("from:cep_power", "CEP", "Power of the condensate pump", 8.5, "power"),
    ("CEP", "DA", "Condensate of TG2", 70.1, "water"),
    ("FWM", "LD62", "Spray of let-down 62", 0.2, "water"),
    ("LD62", "HDR12", "Let-down 62 to the 12 bar header", 236.4, "water"),
    ("HDR12", "LD12", "Steam to let-down 12", 611.4, "water"),
    ("FWM", "LD12", "Spray of let-down 12", 5.4, "water"),
    ("LD12", "HDR4", "Let-down 12 to the 4 bar header", 527.4, "water"),
    ("HDR12", "DISP", "Steam to hot dispersion", 3640.2, "water"),
    ("DISP", "DA", "Condensate of hot dispersion, returned", 127.7, "water"),
    ("DISP", "lost", "Condensate of hot dispersion, lost to the stock", 51.0, "lost"),
    ("DISP", "used", "Heat to hot dispersion", 1982.1, "heat"),
    ("HDR12", "ACC", "Charge of the accumulator", 350.2, "water"),
    ("FWM", "ACC", "Feed water to the accumulator", 2.9, "water"),
    ("ACC", "HDR4", "Discharge of the accumulator", 335.2, "water"),
    ("HDR4", "BM", "Steam to the board machine", 12340.6, "water"),
    ("BM", "DA", "Condensate of the board machine, returned", 817.7, "water"),
    ("BM", "lost", "Condensate of the board machine, lost", 114.4, "lost"),
    ("BM", "used", "Heat to the dryer section", 8057.1, "heat"),
    ("HDR4", "HEAT", "Steam to mill heating", 2546.4, "water"),
    ("HEAT", "DA", "Condensate of mill heating", 109.6, "water"),
    ("HEAT", "used", "Heat to mill heating", 1251.5, "heat"),
    ("HDR4", "DA", "Steam to the deaerator", 2883.0, "water"),
    ("from:makeup", "DA", "Make-up water", 6.2, "water"),
    ("DA", "FWP", "Feed water out of the deaerator", 3255.5, "water"),
    ("from:fwp_power", "FWP", "Power of the feed-water pump", 382.8, "power"),
    ("FWP", "FWM", "Feed-water main", 3571.3, "water"),
)
DESTROYED = {
    "CEP": 3.1,
    "DA": 799.8,
    "B1": 24963.7,
    "B2": 39308.8,
    "HDR62": 150.0,
    "TG1": 2014.8,
    "LD62": 41.6,
    "LD12": 89.2,
    "HDR12": 53.8,
    "ACC": 18.4,
    "HDR4": 143.1,
    "DISP": 1478.8,
    "BM": 3351.6,
    "HEAT": 1183.7,
    "TG2": 2311.7,
    "COND": 1196.9,
    "FWM": -6.0,
    "FWP": 66.6,
}
NODE_NAMES = {
    "CEP": "Condensate pump",
    "DA": "Deaerator",
    "B1": "Gas boiler",
    "B2": "Bark boiler",
    "HDR62": "Header 62 bar",
    "TG1": "Extraction back-pressure turbine TG1",
    "LD62": "Let-down 62 to 12 bar",
    "LD12": "Let-down 12 to 4 bar",
    "HDR12": "Header 12 bar",
    "ACC": "Steam accumulator",
    "HDR4": "Header 4 bar",
    "DISP": "Hot dispersion and coating dryers",
    "BM": "Board machine, dryer section",
    "HEAT": "Mill heating and white water",
    "TG2": "Condensing turbine TG2",
    "COND": "Condenser of TG2",
    "FWM": "Feed-water manifold",
    "FWP": "Feed-water pump",
    "from:gas": "Natural gas",
    "from:bark": "Bark",
    "from:cooling_in": "Cooling water in",
    "from:cep_power": "Power of the condensate pump",
    "from:makeup": "Make-up water",
    "from:fwp_power": "Power of the feed-water pump",
    "used": "Used",
    "lost": "Lost",
    "destroyed": "Destroyed",
}


def mill_flows() -> tuple[FlowLink, ...]:
    streams = [FlowLink(*row) for row in STREAMS]  # type: ignore[arg-type]
    destroyed = [
        FlowLink(key, "destroyed", f"Destroyed in {NODE_NAMES[key]}", kw, "destroyed")
        for key, kw in DESTROYED.items()
    ]
    # Most sites state no heat loss: a link of no width for every piece of equipment.
    lost = [
        FlowLink(key, "lost", f"Heat lost in {NODE_NAMES[key]}", 0.0, "lost") for key in DESTROYED
    ]
    return (*streams, *destroyed, *lost)
