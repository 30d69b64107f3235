"""What a person does about each rule, in plain words, apart from the code that fires it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Runbook:
    """What it means, what to look at first, what to do, and how to undo it."""

    means: str
    look: str
    do: str
    undo: str


_THAW = "Thaw with a reason; the finding stays listed until it clears, and does not freeze"
_THAW += " again before that or before the quiet period is over."
_SETTING = "PATCH the line item's tripwires, after trying the new setting with …/preview."

RUNBOOKS: dict[str, Runbook] = {
    "no_outcomes": Runbook(
        "Bids leave and nothing comes back: the feed of outcomes has stopped, or bids no longer "
        "reach the exchange.",
        "The feed's own log and the last outcome in …/state (feed); other line items of the same "
        "feed.",
        "Freeze if it is not frozen: every silent bid keeps money held for its grace. Repair the "
        "feed and let it send what was kept back; repeats answer `duplicate`.",
        _THAW,
    ),
    "win_rate": Runbook(
        "A far larger or smaller share of bids wins: the market, the floor, our price or the feed "
        "of losses has changed.",
        "…/curve and the bid now against an hour ago; then the share of losses in …/stream.",
        "If losses fail to come, treat it as a broken feed. If our price moved, see what set it. "
        "If the market moved, nothing: the learner follows.",
        _SETTING,
    ),
    "clearing_price": Runbook(
        "Impressions cost far more or less than they used to.",
        "Unit and currency of prices in the newest wins of …/stream, then the bid and what set it.",
        "If the feed's unit is wrong, freeze, repair it and reverse what was booked too high. If "
        "prices did move, look at the cap.",
        "Refunds are booked by …/reverse; " + _THAW,
    ),
    "spend_speed": Runbook(
        "Money goes out far faster or slower than at this hour before.",
        "Spent today against plan and when the day's money ends, in …/state; then bids a minute.",
        "If traffic has grown, the daily budget holds it. If prices have risen, freeze and see "
        "what set the price.",
        _THAW,
    ),
    "value_count": Runbook(
        "Values come far more or less often than the wins let expect.",
        "The newest values in …/stream: doubled events, a second sender, or none since a moment.",
        "Doubled events: freeze, repair the sender, preview and retract the value part from that "
        "moment. Missing ones: let the sender send them again; late values are welcome.",
        "A rewind to the seq before the retraction; " + _THAW,
    ),
    "value_size": Runbook(
        "One value is far larger or smaller than values used to be, below the ceiling too: most "
        "often a change of unit or currency in the feed.",
        "The newest values in …/stream beside those of yesterday, and who changed the sender.",
        "Freeze if it is not frozen. Repair the sender. Preview …/retract of the value part from "
        "`since` on, compare before and after, retract, let the right values come as new events, "
        "then thaw.",
        "A rewind to the seq before the retraction; " + _THAW,
    ),
    "zero_values": Runbook(
        "The feed no longer says when nothing was earned, so what is heard looks better than it "
        "is, and prices rise.",
        "The share of zero values in the newest part of …/stream; a filter in the sender.",
        "Freeze if it is not frozen. Repair the sender and let it send the missing zeros. Where "
        "it cannot, preview and retract the value part from `since` on.",
        "A rewind to the seq before the retraction; " + _THAW,
    ),
    "unknown_values": Runbook(
        "Wins get no word of what they brought, or values name bids whose win is unknown.",
        "Whether values or wins fail to come: the last of each kind in …/state (feed).",
        "Repair the feed that is behind; nothing learnt is wrong, only missing. Values that wait "
        "for their win are taught when it comes.",
        "Nothing to undo.",
    ),
    "silent_bids": Runbook(
        "More bids than usual get no outcome: notices of losses are lost, or bids time out at the "
        "exchange.",
        "The share per source in …/stream and the exchange's time-outs; our answer times.",
        "If bids come too late, raise the caller's deadline or its distance. If notices are lost, "
        "repair the feed: the money is held for the whole grace.",
        _SETTING,
    ),
    "voids": Runbook(
        "More bids than usual fail for another reason than price: creative, time-out, seat.",
        "The `why` of the newest voids in …/stream.",
        "Mend what they name, most often a creative that was refused; freeze until then if all "
        "bids fail.",
        _THAW,
    ),
    "late_outcomes": Runbook(
        "Outcomes come after the grace of their bid: their money had been freed and may have been "
        "spent twice over.",
        "The delay of the feed, and unfunded cost in …/state (money).",
        "Raise grace_s above the delay, or repair the feed. If unfunded grows, freeze.",
        "Lower grace_s again by PATCH; " + _THAW,
    ),
    "refused_outcomes": Runbook(
        "Reports are refused, and none of them is kept: the sender's form, tickets or amounts are "
        "wrong.",
        "The `code` in the answers that the sender got; they are not logged here.",
        "Mend the sender and let it send all of them again.",
        "Nothing to undo.",
    ),
    "unfunded": Runbook(
        "Wins were reported after their grace, when no money was free. The line item froze by "
        "itself when that was booked.",
        "unfunded in …/state (money), and the late entries in …/stream.",
        "Raise the budget by what is unfunded, which turns it into spend, and raise grace_s above "
        "the delay of the feed.",
        _THAW,
    ),
    "disputed": Runbook(
        "The exchange asked for more than was bid. The excess is kept apart and not paid here.",
        "The wins in …/stream whose price is above their bid; fees that one side adds twice.",
        "Settle it with the exchange; if its unit is wrong, freeze until it is mended.",
        "A refund is booked by …/reverse.",
    ),
    "learner_halted": Runbook(
        "No good snapshot is published, so every bid passes `learner_halted`: a refold takes long "
        "or a lesson cannot be learnt.",
        "entries_behind in …/state, the quarantine, the clerk's log.",
        "Wait while entries_behind falls. If it stands still, see the quarantine, then `bidkeel "
        "rebuild`.",
        "Nothing to undo.",
    ),
}
