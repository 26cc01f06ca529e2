"""What Saltmere Trust can hold. Every company, fund and index here is invented."""

from __future__ import annotations

from typing import NamedTuple


class Instrument(NamedTuple):
    """`price`: where its history begins. `beta`: to its market. `own`: daily standard deviation of its own part.
    `follows`: another line of the same company, whose returns it has instead of its market's."""

    id: str
    name: str
    sector: str
    issuer: str
    country: str
    price: float
    beta: float
    own: float
    kind: str = "equity"
    multiplier: int = 1
    expiry: str = ""
    currency: str = ""
    calendar: str = ""
    follows: str = ""


DUBLIN = (
    Instrument("CORVANE", "Corvane Bank", "finance", "Corvane", "IE", 34.00, 1.15, 0.011),
    Instrument("ARDNAVALE", "Ardnavale Insurance", "finance", "Ardnavale", "IE", 21.30, 0.95, 0.010),
    Instrument("DUNMARROW", "Dunmarrow Dairies", "food", "Dunmarrow", "IE", 44.75, 0.60, 0.009),
    Instrument("SKERRANE", "Skerrane Air", "transport", "Skerrane", "IE", 37.20, 1.20, 0.013),
    Instrument("HOLLINPORT", "Hollinport Ferries", "transport", "Hollinport", "IE", 25.10, 0.90, 0.012),
    Instrument("LOCHTIRE", "Lochtire Packaging", "materials", "Lochtire", "IE", 36.50, 0.90, 0.010),
    Instrument("BELLWICK", "Bellwick Cement", "materials", "Bellwick", "IE", 44.10, 1.05, 0.011),
    Instrument("QUILLFANE", "Quillfane Software", "technology", "Quillfane", "IE", 28.40, 1.25, 0.014),
    Instrument("MARROWICK", "Marrowick Homes", "property", "Marrowick", "IE", 49.85, 1.05, 0.012),
    Instrument("TARNHOLT", "Tarnholt Pharma", "health", "Tarnholt", "DE", 62.00, 0.70, 0.011),
    Instrument("KESTERMANN", "Kestermann Werke", "industry", "Kestermann", "DE", 81.50, 1.10, 0.010),
    Instrument(
        "KESTERMANN-PREF", "Kestermann Werke, preference", "industry", "Kestermann", "DE", 74.20, 1.10, 0.003
    )._replace(follows="KESTERMANN"),
    Instrument("BRISONNE", "Brisonne Maison", "retail", "Brisonne", "FR", 118.00, 1.00, 0.010),
    Instrument("OLTREVIA", "Oltrevia Energia", "energy", "Oltrevia", "IT", 31.40, 0.80, 0.010),
    Instrument("VENTAROSA", "Ventarosa Solar", "energy", "Ventarosa", "ES", 23.60, 1.05, 0.014),
    Instrument("THORNABBEY", "Thornabbey Stores", "retail", "Thornabbey", "GB", 33.50, 0.85, 0.011, currency="GBP"),
    Instrument("FENWYKE-WORLD", "Fenwyke World Shares", "world", "Fenwyke", "IE", 52.00, 0.95, 0.002, "fund"),
    Instrument("FENWYKE-BOND", "Fenwyke Euro Bonds", "bonds", "Fenwyke", "IE", 104.00, -0.05, 0.001, "fund"),
    Instrument("FENWYKE-GILT", "Fenwyke Gilts", "bonds", "Fenwyke", "IE", 98.00, -0.06, 0.001, "fund", currency="GBP"),
    Instrument(
        "DUBLIN-INDEX-DEC27",
        "Dublin share index, December 2027",
        "index",
        "",
        "IE",
        7200.0,
        1.0,
        0.001,
        "future",
        10,
        "2027-12-17",
    ),
)
TOKYO = (
    Instrument("KAZANUMA", "Kazanuma Works", "industry", "Kazanuma", "JP", 2140.0, 1.05, 0.010),
    Instrument("NATSUHARA", "Natsuhara Motors", "industry", "Natsuhara", "JP", 3320.0, 1.10, 0.011),
    Instrument("MINATORI", "Minatori Shipping", "transport", "Minatori", "JP", 1480.0, 1.15, 0.014),
    Instrument("YUKISHIRO", "Yukishiro Foods", "food", "Yukishiro", "JP", 2765.0, 0.60, 0.009),
    Instrument("HANEGUSA", "Hanegusa Electric", "technology", "Hanegusa", "JP", 5410.0, 1.20, 0.012),
    Instrument("KOGARASHI", "Kogarashi Software", "technology", "Kogarashi", "JP", 1890.0, 1.25, 0.015),
    Instrument("TSURUBIKO", "Tsurubiko Chemical", "materials", "Tsurubiko", "JP", 1255.0, 1.00, 0.011),
    Instrument("ARAKUMO", "Arakumo Steel", "materials", "Arakumo", "JP", 985.0, 1.10, 0.013),
    Instrument("ORIMATSU", "Orimatsu Instruments", "health", "Orimatsu", "JP", 6720.0, 0.90, 0.012),
    Instrument("FUBUKINO", "Fubukino Pharma", "health", "Fubukino", "JP", 3905.0, 0.65, 0.011),
    Instrument("SHIRANAGI", "Shiranagi Power", "energy", "Shiranagi", "JP", 840.0, 0.60, 0.010),
    Instrument("UMEKURA", "Umekura Stores", "retail", "Umekura", "JP", 2310.0, 0.80, 0.010),
    Instrument("ISOBANE", "Isobane Bank", "finance", "Isobane", "JP", 1120.0, 1.05, 0.011),
    Instrument("MATSUYAGI-BOND", "Matsuyagi Yen Bonds", "bonds", "Matsuyagi", "JP", 10150.0, -0.03, 0.0005, "fund"),
    Instrument(
        "TOKYO-INDEX-DEC27",
        "Tokyo share index, December 2027",
        "index",
        "",
        "JP",
        24100.0,
        1.0,
        0.001,
        "future",
        100,
        "2027-12-10",
    ),
)
NEW_YORK = (
    Instrument("TALLOWMERE", "Tallowmere Systems", "technology", "Tallowmere", "US", 96.00, 1.20, 0.012),
    Instrument("WINDLATCH", "Windlatch Circuits", "technology", "Windlatch", "US", 138.00, 1.40, 0.015),
    Instrument("CINDERMOOR", "Cindermoor Cloud", "technology", "Cindermoor", "US", 61.00, 1.30, 0.015),
    Instrument("MOSSGATE", "Mossgate Media", "technology", "Mossgate", "US", 34.50, 1.10, 0.014),
    Instrument("REDFENNEL", "Redfennel Stores", "retail", "Redfennel", "US", 72.00, 0.85, 0.010),
    Instrument("GRAYCOMBE", "Graycombe Bancorp", "finance", "Graycombe", "US", 48.00, 1.15, 0.011),
    Instrument("IRONQUAY", "Ironquay Rail", "transport", "Ironquay", "US", 155.00, 0.95, 0.009),
    Instrument("LANTERNFIELD", "Lanternfield Health", "health", "Lanternfield", "US", 112.00, 0.75, 0.010),
    Instrument("NETTLEBURY", "Nettlebury Biotech", "health", "Nettlebury", "US", 41.00, 1.05, 0.019),
    Instrument("ORCHARDINE", "Orchardine Beverages", "food", "Orchardine", "US", 58.00, 0.60, 0.008),
    Instrument("PALEWATER", "Palewater Power", "energy", "Palewater", "US", 66.00, 0.55, 0.009),
    Instrument("BRACKWATER", "Brackwater Oil", "energy", "Brackwater", "US", 53.00, 1.00, 0.013),
    Instrument("SABLECREST", "Sablecrest Aerospace", "industry", "Sablecrest", "US", 187.00, 1.05, 0.011),
    Instrument("UMBERLINE", "Umberline Chemicals", "materials", "Umberline", "US", 79.00, 1.00, 0.011),
    Instrument(
        "KESTERMANN-DR", "Kestermann Werke, dollar receipts", "industry", "Kestermann", "DE", 45.00, 1.10, 0.002
    )._replace(follows="KESTERMANN"),
    Instrument("OAKENSHAW-BOND", "Oakenshaw Dollar Bonds", "bonds", "Oakenshaw", "US", 100.00, -0.06, 0.001, "fund"),
    Instrument(
        "WESTERN-INDEX-DEC27",
        "Western share index, December 2027",
        "index",
        "",
        "US",
        3350.0,
        1.0,
        0.001,
        "future",
        50,
        "2027-12-17",
    ),
    Instrument(
        "COPPER-DEC27", "Copper, December 2027", "metals", "", "US", 295.0, 0.30, 0.012, "future", 250, "2027-12-29"
    ),
)
MARKETS = (("XDUB", "EUR", DUBLIN), ("XTKS", "JPY", TOKYO), ("XNYS", "USD", NEW_YORK))
PRICED = tuple(
    instrument._replace(calendar=calendar, currency=instrument.currency or currency)
    for calendar, currency, listed in MARKETS
    for instrument in listed
)
CASH = tuple(
    Instrument(f"CASH-{currency}", f"Cash in {currency}", "", "", "", 1.0, 0.0, 0.0, "cash", currency=currency)
    for currency in ("EUR", "GBP", "JPY", "USD")
)
