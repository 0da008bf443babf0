"""ISO 4217: the codes of currencies in use, and the minor units that prices come quoted in."""

from __future__ import annotations

CODES = frozenset(
    """
    AED AFN ALL AMD ANG AOA ARS AUD AWG AZN BAM BBD BDT BGN BHD BIF BMD BND BOB BRL BSD BTN BWP
    BYN BZD CAD CDF CHF CLF CLP CNH CNY COP COU CRC CUP CVE CZK DJF DKK DOP DZD EGP ERN ETB EUR
    FJD FKP GBP GEL GHS GIP GMD GNF GTQ GYD HKD HNL HTG HUF IDR ILS INR IQD IRR ISK JMD JOD JPY
    KES KGS KHR KMF KPW KRW KWD KYD KZT LAK LBP LKR LRD LSL LYD MAD MDL MGA MKD MMK MNT MOP MRU
    MUR MVR MWK MXN MYR MZN NAD NGN NIO NOK NPR NZD OMR PAB PEN PGK PHP PKR PLN PYG QAR RON RSD
    RUB RWF SAR SBD SCR SDG SEK SGD SHP SLE SOS SRD SSP STN SVC SYP SZL THB TJS TMT TND TOP TRY
    TTD TWD TZS UAH UGX USD UYU UZS VES VND VUV WST XAF XCD XCG XOF XPF YER ZAR ZMW ZWG
    """.split()  # noqa: SIM905 - a block of codes reads better than 160 quoted ones
)
"""Active codes; with CNH, the market's code for offshore renminbi."""

MINOR_UNITS = {
    "GBX": "GBP",
    "GBp": "GBP",
    "GBpence": "GBP",
    "ZAC": "ZAR",
    "ZAc": "ZAR",
    "ILA": "ILS",
    "ILa": "ILS",
    "USX": "USD",
    "USd": "USD",
    "EUX": "EUR",
    "EUc": "EUR",
}
