"""Index numbers: arrays in, arrays out.

The layer imports NumPy and `errors` alone.  Nothing here knows paths, dates, column names or
logging, and nothing loops over products, pairs or lines.

Notation, used in every kernel:

    p, q    (T, N)  prices and quantities; rows periods, columns products; NaN = not sold
    m       (T, N)  1.0 where a product is priced, else 0.0
    x       (T, N)  expenditure p * q, 0 where not sold
    l       (T, N)  log price, centred per product, 0 where not sold
    e       (T, N)  exp(l): price relative to the product's own geometric mean, 0 where not sold
    w       (N,)    weights of products in a period of their own, for Lowe and Young
    P[s,t]  (T, T)  index level of period t relative to period s, base 1
    W, K            window length in periods; number of windows, or of listed pairs of periods
    B, R            segments: columns that are a panel of their own, or all but them; recipes
"""
