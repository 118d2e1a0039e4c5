"""How each chain describes an item, in its own style."""

import zlib

from tests.sample.assortment import Item
from tests.sample.market import Pack


def description(item: Item) -> str:
    """Return the free-text description an item carries in its chain's files."""
    style = {"brindlow": _brindlow, "kestrin": _kestrin, "ombray": _ombray}[item.feed]
    return style(item)


def size(item: Item) -> str:
    """Return the size text of the item master, empty for one item in twelve."""
    if zlib.crc32(item.code.encode()) % 12 == 0:
        return ""
    return {"brindlow": _dense, "kestrin": _spaced, "ombray": _comma}[item.feed](item.pack)


def variant(item: Item) -> str:
    """Return the flavour or kind in the chain's words."""
    return item.aggregate.variants[item.variant][item.feed]


def _brindlow(item: Item) -> str:
    words = [
        item.brand.upper().replace(" VALUE", " VAL"),
        item.aggregate.kind["brindlow"],
        variant(item),
        f"{item.fat.replace('.', ',')}%" if item.fat else "",
        "ORG" if item.organic else "",
        _dense(item.pack),
    ]
    return " ".join(word for word in words if word)


def _kestrin(item: Item) -> str:
    organic = "organic " if item.organic else ""
    if item.aggregate.weighed:
        return f"{item.brand} {organic}{variant(item)}, loose, per kg"
    fat = f", {item.fat} % fat" if item.fat else ""
    return f"{item.brand} {organic}{item.aggregate.kind['kestrin']} {variant(item)}{fat}, {_spaced(item.pack)}"


def _ombray(item: Item) -> str:
    words = [
        item.aggregate.kind["ombray"],
        variant(item),
        '"BIO"' if item.organic else "",
        f"{item.fat.replace('.', ',')}% MG" if item.fat else "",
        item.brand.upper(),
        "VRAC" if item.aggregate.weighed else _comma(item.pack),
    ]
    news = "; NOUVEAU" if item.predecessor else ""
    return " ".join(word for word in words if word) + news


def _dense(pack: Pack) -> str:
    unit = "PK" if pack.unit == "pc" else pack.unit.upper()
    count = f"{pack.count}X" if pack.count > 1 else ""
    return f"{count}{pack.amount:g}{unit}".replace(".", ",")


def _spaced(pack: Pack) -> str:
    if pack.unit == "pc":
        return f"pack of {pack.amount:g}"
    count = f"{pack.count} x " if pack.count > 1 else ""
    return f"{count}{pack.amount:g} {pack.unit}"


def _comma(pack: Pack) -> str:
    unit = "PCES" if pack.unit == "pc" else pack.unit.upper()
    count = f"{pack.count}X" if pack.count > 1 else ""
    return f"{count}{pack.amount:g} {unit}".replace(".", ",")
