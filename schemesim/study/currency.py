"""Units of money: the three-letter codes of ISO 4217, alone or counted in thousands or millions.

The list holds the codes in circulation, *from memory* of the standard.
"""

from __future__ import annotations

from schemesim.errors import nearest, reject

CODES = frozenset(
    (  # noqa: SIM905 - shorter to read
        "AED AFN ALL AMD ANG AOA ARS AUD AWG AZN BAM BBD BDT BGN BHD BIF BMD BND BOB BRL BSD BTN BWP BYN BZD CAD CDF "
        "CHF CLP CNY COP CRC CUP CVE CZK DJF DKK DOP DZD EGP ERN ETB EUR FJD FKP GBP GEL GHS GIP GMD GNF GTQ GYD HKD "
        "HNL HTG HUF IDR ILS INR IQD IRR ISK JMD JOD JPY KES KGS KHR KMF KPW KRW KWD KYD KZT LAK LBP LKR LRD LSL LYD "
        "MAD MDL MGA MKD MMK MNT MOP MRU MUR MVR MWK MXN MYR MZN NAD NGN NIO NOK NPR NZD OMR PAB PEN PGK PHP PKR PLN "
        "PYG QAR RON RSD RUB RWF SAR SBD SCR SDG SEK SGD SHP SLE SOS SRD SSP STN SYP SZL THB TJS TMT TND TOP TRY TTD "
        "TWD TZS UAH UGX USD UYU UZS VES VND VUV WST XAF XCD XOF XPF YER ZAR ZMW ZWG"
    ).split()
)
"""Codes known."""

PREFIXES = ("", "k", "M")
"""What may stand before a code: thousands and millions."""

EXPECTED = "a currency code of ISO 4217, such as EUR, or thousands or millions of it: kEUR, MEUR"


def is_unit(unit: str) -> bool:
    """Whether a text is a unit of money.

    Examples
    --------
    >>> is_unit("EUR"), is_unit("kUSD"), is_unit("euro")
    (True, True, False)
    """
    return unit[-3:] in CODES and unit[:-3] in PREFIXES


def check_unit(unit: object) -> str:
    """The unit, if it is one.

    Raises
    ------
    InputError
        For anything else, with the nearest code.
    """
    if isinstance(unit, str) and is_unit(unit):
        return unit
    tip = nearest(unit.upper(), CODES) if isinstance(unit, str) else ""
    raise reject("currency unit", unit, EXPECTED, tip=tip)
