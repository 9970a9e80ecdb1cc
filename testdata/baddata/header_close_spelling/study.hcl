# The header spells a column otherwise.
study { title = "header close spelling" }

input "rows_read" {
  file    = "data.csv"
  columns = {
    g = text
    x = number("d")
    y = number("N")
    fruit = number
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  weight   = fruit
  smoothness { rule = gcv }
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
