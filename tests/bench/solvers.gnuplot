# SPDX-License-Identifier: MIT
#
# The chart of bench_solvers:  gnuplot -e "table='solvers.csv'; chart='solvers.png'" solvers.gnuplot
set terminal pngcairo size 1100,750 noenhanced
set output chart
set datafile separator ','
set logscale x
set xlabel 'processor seconds'
set ylabel 'error on unseen cells, over sigma sqrt(r(m+n-r)/seen)'
set title '3000 x 2000, rank 10, a tenth of the cells seen, noise 0.1: lines step by step, points whole fills'
set yrange [1:2]
set grid
set key outside right
names = 'evidence fixed-rank-cg grassmann-cg grassmann-trust-region alternating recursive-least-squares '.\
        'grassmann-stochastic grassmann-variance-reduced subgradient'
only(way, name) = (strcol(1) eq way && strcol(2) eq name) ? $5 : NaN
set datafile missing NaN
plot for [k = 1:words(names)] table skip 1 using 4:(only('steps', word(names, k))) \
         with linespoints lc k pt 7 ps 0.5 title word(names, k), \
     for [k = 1:words(names)] table skip 1 using 4:(only('fill', word(names, k))) \
         with points lc k pt 2 ps 1.5 notitle, \
     table skip 1 using 4:(only('fill', 'auto')) with points lc rgb 'black' pt 3 ps 2 title 'auto (fill)'
