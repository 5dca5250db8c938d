package main

import "strings"

// glyphs are figures of five by seven dots, drawn for reading across a room: no two differ by one
// dot only, and nothing hangs below the line.
func glyph(r rune) [7]string {
	switch r {
	case '0':
		return [7]string{" ### ", "#   #", "#   #", "#   #", "#   #", "#   #", " ### "}
	case '1':
		return [7]string{"  #  ", " ##  ", "# #  ", "  #  ", "  #  ", "  #  ", "#####"}
	case '2':
		return [7]string{" ### ", "#   #", "    #", "   # ", "  #  ", " #   ", "#####"}
	case '3':
		return [7]string{" ### ", "#   #", "    #", "  ## ", "    #", "#   #", " ### "}
	case '4':
		return [7]string{"   # ", "  ## ", " # # ", "#  # ", "#####", "   # ", "   # "}
	case '5':
		return [7]string{"#####", "#    ", "#    ", "#### ", "    #", "#   #", " ### "}
	case '6':
		return [7]string{"  ## ", " #   ", "#    ", "#### ", "#   #", "#   #", " ### "}
	case '7':
		return [7]string{"#####", "    #", "    #", "   # ", "  #  ", "  #  ", "  #  "}
	case '8':
		return [7]string{" ### ", "#   #", "#   #", " ### ", "#   #", "#   #", " ### "}
	case '9':
		return [7]string{" ### ", "#   #", "#   #", " ####", "    #", "   # ", " ##  "}
	case '.':
		return [7]string{"  ", "  ", "  ", "  ", "  ", "##", "##"}
	case '-':
		return [7]string{"    ", "    ", "    ", "####", "    ", "    ", "    "}
	}
	return [7]string{"  ", "  ", "  ", "  ", "  ", "  ", "  "}
}

// dots lays glyphs beside one another, one dot apart.
func dots(text string) [7]string {
	var rows [7]strings.Builder
	for i, r := range text {
		for y, row := range glyph(r) {
			if i > 0 {
				rows[y].WriteByte(' ')
			}
			rows[y].WriteString(row)
		}
	}
	var out [7]string
	for y := range rows {
		out[y] = rows[y].String()
	}
	return out
}

// largest draws a text with each dot two columns wide and one row high, below a free row.
func largest(text string) []string {
	lines := []string{""}
	for _, row := range dots(text) {
		var b strings.Builder
		for _, d := range row {
			if d == '#' {
				b.WriteString("██")
			} else {
				b.WriteString("  ")
			}
		}
		lines = append(lines, b.String())
	}
	return lines
}

// large draws a text with two dots above one another in each place, above half a free row: four in all.
func large(text string) []string {
	rows := dots(text)
	var lines []string
	for y := 0; y < len(rows); y += 2 {
		var b strings.Builder
		for x := range rows[y] {
			upper := rows[y][x] == '#'
			lower := y+1 < len(rows) && rows[y+1][x] == '#'
			switch {
			case upper && lower:
				b.WriteString("█")
			case upper:
				b.WriteString("▀")
			case lower:
				b.WriteString("▄")
			default:
				b.WriteString(" ")
			}
		}
		lines = append(lines, b.String())
	}
	return lines
}
