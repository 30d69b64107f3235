"""Bidkeel names a price for every impression opportunity and never spends more than the budget.

api        HTTP in, HTTP out
decision   snapshot + opportunity -> price (pure)
guard      may this price leave? cap, floor, flight, freeze, the slice in hand
learner    estimators: what the impressions bought have taught (pure)
ledger     the rules of money and of the stream (pure, integers)
store      SQL, and nothing but SQL
rehearsal  invented markets that run the same decision and learner code
bidding, feedback, upkeep, clerk, operating   the stories that tie them together
"""
