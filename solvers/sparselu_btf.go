package solvers

// luMatch finds a row for every column of the square matrix a such that the
// entry at (row, column) is part of the pattern and no row is used twice: a
// permutation of the rows without zeros on the diagonal. Entries on the
// diagonal of a are taken first. It returns the row of each column, or a
// column for which there is none.
//
// Method: augmenting paths by depth-first search with one step of look-ahead.
// Source: I. S. Duff, "On algorithms for obtaining a maximum transversal", ACM
// Trans. Math. Softw. 7 (1981) 315-330.
func luMatch(a *CSC) (row []int32, unmatched int) {
	n := a.Cols
	row = make([]int32, n)
	col := make([]int32, n) // column of each row, -1: free
	for j := range n {
		row[j], col[j] = -1, -1
	}
	for j := range n {
		for _, i := range a.I[a.P[j]:a.P[j+1]] {
			if i == j {
				row[j], col[j] = int32(j), int32(j)
			}
		}
	}

	seen := make([]int32, n) // column visited for the sake of column seen-1
	ahead := make([]int, n)  // rows of a column before this place aren't free
	place := make([]int, n)  // next row of a column on the path
	path := make([]int32, 0) // columns from the start to the present one
	copy(ahead, a.P)
	for start := range n {
		if row[start] >= 0 {
			continue
		}
		path = append(path[:0], int32(start))
		seen[start] = int32(start) + 1
		place[start] = a.P[start]
		found := false
	search:
		for len(path) > 0 {
			j := path[len(path)-1]
			end := a.P[j+1]
			for ahead[j] < end {
				i := a.I[ahead[j]]
				ahead[j]++
				if col[i] < 0 {
					// Free row: shift the rows along the path.
					free := int32(i)
					for k := len(path) - 1; k >= 0; k-- {
						c := path[k]
						row[c], free = free, row[c]
						col[row[c]] = c
					}
					found = true
					break search
				}
			}
			for place[j] < end {
				i := a.I[place[j]]
				place[j]++
				if c := col[i]; seen[c] != int32(start)+1 {
					seen[c] = int32(start) + 1
					place[c] = a.P[c]
					path = append(path, c)
					continue search
				}
			}
			path = path[:len(path)-1]
		}
		if !found {
			return nil, start
		}
	}
	return row, -1
}

// luBlocks finds the block upper triangular form of a with its rows permuted
// so that row[j] faces column j. Column order[k], k = start[b]..start[b+1]-1,
// belongs to block b; an entry of a lies in a block not after that of its
// column. Blocks can't be split further.
//
// Method: strongly connected components of the graph with an edge from column
// j to the columns whose rows it has entries in. Source: R. E. Tarjan,
// "Depth-first search and linear graph algorithms", SIAM J. Comput. 1 (1972)
// 146-160.
func luBlocks(a *CSC, row []int32) (order []int32, start []int) {
	n := a.Cols
	col := make([]int32, n) // column that a row faces
	for j, i := range row {
		col[i] = int32(j)
	}
	order = make([]int32, 0, n)
	start = []int{0}
	number := make([]int32, n) // order of discovery from 1; n+1: in a finished block
	low := make([]int32, n)    // smallest number reached
	place := make([]int, n)    // next entry of a column on the path
	var path, open []int32     // search path; columns not yet in a block
	count := int32(0)
	for root := range n {
		if number[root] != 0 {
			continue
		}
		path = append(path, int32(root))
		for len(path) > 0 {
			j := path[len(path)-1]
			if number[j] == 0 {
				count++
				number[j], low[j] = count, count
				place[j] = a.P[j]
				open = append(open, j)
			}
			descended := false
			for place[j] < a.P[j+1] {
				c := col[a.I[place[j]]]
				place[j]++
				if number[c] == 0 {
					path = append(path, c)
					descended = true
					break
				}
				low[j] = min(low[j], number[c])
			}
			if descended {
				continue
			}
			path = path[:len(path)-1]
			if len(path) > 0 {
				up := path[len(path)-1]
				low[up] = min(low[up], low[j])
			}
			if low[j] == number[j] {
				for {
					c := open[len(open)-1]
					open = open[:len(open)-1]
					number[c], low[c] = int32(n)+1, int32(n)+1
					order = append(order, c)
					if c == j {
						break
					}
				}
				start = append(start, len(order))
			}
		}
	}
	return order, start
}
