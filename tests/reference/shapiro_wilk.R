# Writes shapiro_wilk.toml: Rscript tests/reference/shapiro_wilk.R > tests/reference/shapiro_wilk.toml
cat('text = "R 4 shapiro.test, a translation of Algorithm AS R94 (P. Royston, Applied Statistics 44 (1995) 547-551)"\n')
show <- function(id, page, read, tier, inputs, x, printed = "") {
  s <- shapiro.test(x)
  cat(sprintf('\n[[case]]\nid = "%s"\npage = "%s"\nread_in = "%s"\ntier = "%s"\n', id, page, read, tier))
  cat(sprintf('calculation = "shapiro_wilk"\n[case.inputs]\n%s\n%s', inputs, printed))
  cat(sprintf('[case.recomputed]\nW = %.16g\np = %.16g\n', s$statistic, s$p.value))
}
weights <- c(148, 154, 158, 160, 161, 162, 166, 170, 182, 195, 236)
show("shapiro-wilk-1965", "S. S. Shapiro and M. B. Wilk, Biometrika 52 (1965) 591-611, section 4, example 1", "from memory",
     "printed", paste0("data = [", paste(weights, collapse = ", "), "]"), weights, '[case.printed]\nW = "0.79"\n')
for (n in c(3, 4, 5, 6, 7, 11, 12, 13, 50, 500, 5000)) for (power in c(1, 2, 8)) {
  x <- (((1:n) * 7919) %% 104729 / 104729)^power
  show(sprintf("sequence-%d-%d", n, power), "computed", "computed", "recomputed",
       sprintf("# i * 7919 modulo 104729, over 104729, to a power, for i from 1 to count\ncount = %d\npower = %d", n, power), x)
}
