"""The stories that test_settle tells, by what a line item spends on; the budget is 100."""

from __future__ import annotations

_OPEN = """
    lease s 40 -> - held=40
    bid a s 10
"""
_GONE = (
    _OPEN
    + """
    close s -> - held=0
"""
)

WON = {
    "won below the bid": _OPEN + "won a 7 -> recorded spent=7 day=7 held=30",
    "won at the bid": _OPEN + "won a 10 -> recorded spent=10 day=10 held=30",
    "won for nothing": _OPEN + "won a 0 -> recorded held=30",
    "lost": _OPEN + "lost a 12 -> recorded held=30",
    "void": _OPEN + "void a -> recorded held=30",
    "won again, and at another price": _OPEN
    + """
        won a 7 -> recorded spent=7 day=7 held=30
        won a 7 -> duplicate
        won a 8 -> conflict
        won a 8 -> conflict
        won a 7 -> duplicate
    """,
    "lost again, and with another price to win": _OPEN
    + """
        lost a 12 -> recorded held=30
        lost a 12 -> duplicate
        lost a 13 -> conflict
        lost a -> conflict
    """,
    "lost after won moves nothing": _OPEN
    + """
        won a 7 -> recorded spent=7 day=7 held=30
        lost a -> conflict
        void a -> conflict
    """,
    "void after lost moves nothing": _OPEN
    + """
        lost a -> recorded held=30
        void a -> conflict
    """,
    "won after lost costs once, whatever else is said": _OPEN
    + """
        lost a -> recorded held=30
        won a 7 -> conflict spent=7 day=7
        won a 7 -> conflict
        won a 9 -> conflict
        billed a 7 -> conflict
        lost a -> duplicate
    """,
    "won for nothing after lost has cost what it costs": _OPEN
    + """
        lost a -> recorded held=30
        won a 0 -> conflict
        won a 9 -> conflict
    """,
    "won after void": _OPEN
    + """
        void a -> recorded held=30
        won a 7 -> conflict spent=7 day=7
    """,
    "billed after lost costs once": _OPEN
    + """
        lost a -> recorded held=30
        billed a 7 -> conflict spent=7 day=7
        billed a 7 -> conflict
        billed a 8 -> conflict
        won a 7 -> conflict
    """,
    "billed after won moves nothing": _OPEN
    + """
        won a 7 -> recorded spent=7 day=7 held=30
        billed a 9 -> recorded
        billed a 9 -> duplicate
        billed a 7 -> conflict
    """,
    "billed first is a win": _OPEN
    + """
        billed a 7 -> recorded spent=7 day=7 held=30
        won a 9 -> recorded
        won a 9 -> duplicate
        won a 8 -> conflict
    """,
    "lost after billed moves nothing": _OPEN
    + """
        billed a 7 -> recorded spent=7 day=7 held=30
        lost a -> conflict
        void a -> conflict
        won a 7 -> recorded
    """,
    "a price above the bid is disputed": _OPEN
    + "won a 13 -> recorded spent=10 day=10 held=30 disputed=3",
    "a bill above the bid is disputed": _OPEN
    + "billed a 13 -> recorded spent=10 day=10 held=30 disputed=3",
    "a late price above the bid is disputed": _GONE + "won a 13 -> late spent=10 day=10 disputed=3",
    "won above the bid after lost": _OPEN
    + """
        lost a -> recorded held=30
        won a 13 -> conflict spent=10 day=10 disputed=3
    """,
    "late with free money": _GONE
    + """
        won a 7 -> late spent=7 day=7
        won a 7 -> duplicate
        lost a -> conflict
    """,
    "late loss and void move nothing": _GONE
    + """
        bid b s 10
        lost a -> late
        void b -> late
        lost a -> duplicate
    """,
    "late bill": _GONE + "billed a 7 -> late spent=7 day=7",
    "late without free money": _GONE
    + """
        lease t 95 -> - held=95
        won a 7 -> late unfunded=7
        won a 7 -> duplicate
    """,
    "late with just enough free money": _GONE
    + """
        lease t 93 -> - held=93
        won a 7 -> late spent=7 day=7
    """,
    "late with a nano too little": _GONE
    + """
        lease t 94 -> - held=94
        won a 7 -> late unfunded=7
    """,
    "late, unfunded and above the bid": _GONE
    + """
        lease t 100 -> - held=100
        won a 13 -> late unfunded=10 disputed=3
    """,
    "a raised budget funds what was unfunded": _GONE
    + """
        lease t 100 -> - held=100
        won a 7 -> late unfunded=7
        budget 104 -> - spent=4 unfunded=3
        budget 110 -> - spent=7 unfunded=0
    """,
    "won after lost without free money": _OPEN
    + """
        lost a -> recorded held=30
        lease t 70 -> - held=100
        won a 7 -> conflict unfunded=7
        won a 7 -> conflict
        billed a 7 -> conflict
    """,
    "a foreign ticket is late while its hold stays": _OPEN
    + """
        foreign a
        won a 7 -> late spent=7 day=7
        won a 7 -> duplicate
        close s -> - held=0
    """,
    "a foreign loss moves nothing": _OPEN
    + """
        foreign a
        lost a -> late
    """,
    "retiring frees what was never issued, and a win races it": _OPEN
    + """
        bid b s 5
        retire s -> - held=15
        won a 7 -> recorded spent=7 day=7 held=5
        won b 5 -> recorded spent=12 day=12 held=0
        close s
    """,
    "the day takes what it can of a late win": _GONE
    + """
        daily 5
        won a 7 -> late spent=7 day=5 over=2
        bid b s 4
        won b 4 -> late spent=11 over=6
    """,
    "holds of the day leave no room for a late win": _GONE
    + """
        daily 20
        lease t 18 -> - held=18
        won a 7 -> late spent=7 day=2 over=5
    """,
    "a lowered budget falls with its holds": _OPEN
    + """
        budget 20
        won a 7 -> recorded spent=7 day=7 held=30
        retire s -> - held=0
        lease t 13 -> - held=13
    """,
    "a lowered budget leaves nothing for a late win": _GONE
    + """
        lease t 40 -> - held=40
        budget 20
        won a 7 -> late unfunded=7
        close t -> - held=0
        budget 21 -> - spent=7 unfunded=0
    """,
    "a raised daily budget makes room": _GONE
    + """
        daily 3
        daily 9
        won a 7 -> late spent=7 day=7
    """,
}

BILLED = {
    "won owes, billed pays": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 7 -> recorded spent=7 day=7 held=30 owed=0
        billed a 7 -> duplicate
        won a 7 -> duplicate
    """,
    "billed less than owed": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 4 -> recorded spent=4 day=4 held=30 owed=0
    """,
    "billed nothing": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 0 -> recorded held=30 owed=0
    """,
    "billed more than owed goes the late way": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 9 -> recorded spent=9 day=9 held=30 owed=0
    """,
    "billed more than owed without free money": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        lease t 63 -> - held=100
        billed a 9 -> recorded spent=7 day=7 held=93 owed=0 unfunded=2
    """,
    "billed above the bid": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 13 -> recorded spent=10 day=10 held=30 owed=0 disputed=3
    """,
    "won above the bid owes no more than the bid": _OPEN
    + """
        won a 13 -> recorded owed=10
        billed a 13 -> recorded spent=10 day=10 held=30 owed=0 disputed=3
    """,
    "billed first is a win": _OPEN
    + """
        billed a 7 -> recorded spent=7 day=7 held=30
        won a 9 -> recorded
        void a -> conflict
        billed a 9 -> conflict
    """,
    "void after an unbilled win": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        void a -> recorded held=30 owed=0
        void a -> duplicate
        won a 7 -> duplicate
    """,
    "billed after the win was voided": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        void a -> recorded held=30 owed=0
        billed a 7 -> conflict spent=7 day=7
        billed a 7 -> conflict
        billed a 8 -> conflict
    """,
    "void after a billed win": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        billed a 7 -> recorded spent=7 day=7 held=30 owed=0
        void a -> conflict
    """,
    "lost after an unbilled win moves nothing": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        lost a -> conflict
        billed a 7 -> recorded spent=7 day=7 held=30 owed=0
    """,
    "won at another price still owes the first": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        won a 9 -> conflict
        billed a 7 -> recorded spent=7 day=7 held=30 owed=0
    """,
    "won after lost, then billed": _OPEN
    + """
        lost a -> recorded held=30
        won a 7 -> conflict spent=7 day=7
        billed a 7 -> conflict
    """,
    "billed after lost": _OPEN
    + """
        lost a -> recorded held=30
        billed a 7 -> conflict spent=7 day=7
        won a 7 -> conflict
    """,
    "a late win costs when it is billed": _GONE
    + """
        won a 7 -> late
        billed a 7 -> recorded spent=7 day=7
    """,
    "a late win billed without free money": _GONE
    + """
        lease t 100 -> - held=100
        won a 7 -> late
        billed a 7 -> recorded unfunded=7
    """,
    "a late bill without a win": _GONE + "billed a 7 -> late spent=7 day=7",
    "void of a late win": _GONE
    + """
        won a 7 -> late
        void a -> recorded
        void a -> duplicate
    """,
    "owed outlives the slice until billing grace ends": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        close s -> - held=7
        billed a 7 -> recorded spent=7 day=7 held=0 owed=0
    """,
    "billed after billing grace": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        close s and_bills -> - held=0 owed=0
        billed a 7 -> recorded spent=7 day=7
    """,
    "billed after billing grace without free money": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        close s and_bills -> - held=0 owed=0
        lease t 100 -> - held=100
        billed a 7 -> recorded unfunded=7
    """,
    "void after billing grace": _OPEN
    + """
        won a 7 -> recorded held=37 owed=7
        close s and_bills -> - held=0 owed=0
        void a -> recorded
    """,
    "only the one that is billed is paid": _OPEN
    + """
        bid b s 10
        won a 7 -> recorded held=37 owed=7
        won b 5 -> recorded held=32 owed=12
        billed b 5 -> recorded spent=5 day=5 held=27 owed=7
        close s -> - held=7
        void a -> recorded held=0 owed=0
    """,
    "a foreign win and its bill go the late way": _OPEN
    + """
        foreign a
        won a 7 -> late
        billed a 7 -> recorded spent=7 day=7
    """,
    "won for nothing owes nothing": _OPEN
    + """
        won a 0 -> recorded held=30
        void a -> recorded
        billed a 4 -> conflict spent=4 day=4
    """,
}
