#!/bin/sh
# make-chain.sh MASSES: a chain of masses between walls, with springs and a little damping, pushed at two
# masses and measured in the speeds of two others: stable, and large enough that a search takes long.
awk -v n="$1" 'BEGIN {
    print "title: Chain of " n " masses\nsetting: continuous\nplant:\n  A:"
    for (i = 1; i <= n; i++) row(n + i, 1, 0, 0)
    for (i = 1; i <= n; i++) row(i, -2, n + i, -0.02)
    print "  B:"
    for (i = 1; i <= 2 * n; i++) print "    - [" (i == n + 2) ", " (i == n + int(n / 2)) "]"
    print "  C:"
    unit(n + 3); unit(2 * n - 1)
    print "disturbance:\n  W:"; diagonal()
    print "weights:\n  Q:"; diagonal()
    print "  R: [[1, 0], [0, 1]]\ngain:\n  pattern: [[free, 0], [0, free]]"
}
function row(a, x, b, y,   j, line, value) {
    line = "    - ["
    for (j = 1; j <= 2 * n; j++) {
        value = j == a ? x : j == b ? y : (x == -2 && (j == a - 1 || j == a + 1) && j >= 1 && j <= n) ? 1 : 0
        line = line (j > 1 ? ", " : "") value
    }
    print line "]"
}
function unit(a,   j, line) {
    line = "    - ["
    for (j = 1; j <= 2 * n; j++) line = line (j > 1 ? ", " : "") (j == a)
    print line "]"
}
function diagonal(   i) { for (i = 1; i <= 2 * n; i++) unit(i) }'
