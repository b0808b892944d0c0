// Package output writes what a run has recorded: waveforms as CSV, a summary as
// JSON, and pictures. It writes to the writers and the directory it is given,
// and never leaves a half-written file.
package output

import (
	"bufio"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"

	"islet/engine"
	"islet/engine/compare"
)

// WriteCSV writes a trace: a header of channel names with units, `t [s]` first,
// and a row for every row of the trace, numbers in the shortest form that reads
// back to the same bits. At an event two rows have the same time, the state
// before it and the state after it.
func WriteCSV(w io.Writer, tr *engine.Trace) error {
	out := bufio.NewWriter(w)
	head := csv.NewWriter(out)
	row := []string{"t [s]"}
	for _, ch := range tr.Channels {
		row = append(row, ch.Name+" ["+ch.Unit+"]")
	}
	if err := head.Write(row); err != nil {
		return err
	}
	head.Flush()
	var b []byte
	for k, t := range tr.Time {
		b = strconv.AppendFloat(b[:0], t, 'g', -1, 64)
		for i := range tr.Channels {
			b = append(b, ',')
			b = strconv.AppendFloat(b, tr.Values(i)[k], 'g', -1, 64)
		}
		b = append(b, '\n')
		if _, err := out.Write(b); err != nil {
			return err
		}
	}
	if err := head.Error(); err != nil {
		return err
	}
	return out.Flush()
}

// ReadCSV reads what WriteCSV wrote: names and units of the columns, the time
// first, and the columns.
func ReadCSV(r io.Reader) (names, units []string, columns [][]float64, err error) {
	rows, err := csv.NewReader(r).ReadAll()
	if err != nil {
		return nil, nil, nil, fmt.Errorf("output: %w", err)
	}
	if len(rows) == 0 {
		return nil, nil, nil, errors.New("output: no header")
	}
	for _, c := range rows[0] {
		name, unit, ok := strings.Cut(c, " [")
		if !ok {
			return nil, nil, nil, fmt.Errorf("output: column %q has no unit", c)
		}
		names, units = append(names, name), append(units, strings.TrimSuffix(unit, "]"))
	}
	columns = make([][]float64, len(names))
	for k, row := range rows[1:] {
		for i, c := range row {
			v, err := strconv.ParseFloat(c, 64)
			if err != nil {
				return nil, nil, nil, fmt.Errorf("output: row %d, column %q: %w", k+1, names[i], err)
			}
			columns[i] = append(columns[i], v)
		}
	}
	return names, units, columns, nil
}

// WriteJSON writes v as indented JSON. A number that JSON can't hold is an
// error that names its place.
func WriteJSON(w io.Writer, v any) error {
	if err := finite(reflect.ValueOf(v), ""); err != nil {
		return err
	}
	e := json.NewEncoder(w)
	e.SetIndent("", " ")
	return e.Encode(v)
}

func finite(v reflect.Value, at string) error {
	switch v.Kind() {
	case reflect.Float64, reflect.Float32:
		if x := v.Float(); math.IsNaN(x) || math.IsInf(x, 0) {
			return fmt.Errorf("output: %s is %g, which JSON can't hold", strings.TrimPrefix(at, "."), x)
		}
	case reflect.Pointer, reflect.Interface:
		if !v.IsNil() {
			return finite(v.Elem(), at)
		}
	case reflect.Struct:
		for i := range v.NumField() {
			if v.Type().Field(i).IsExported() {
				if err := finite(v.Field(i), at+"."+v.Type().Field(i).Name); err != nil {
					return err
				}
			}
		}
	case reflect.Slice, reflect.Array:
		for i := range v.Len() {
			if err := finite(v.Index(i), fmt.Sprintf("%s[%d]", at, i)); err != nil {
				return err
			}
		}
	case reflect.Map:
		for _, k := range v.MapKeys() {
			if err := finite(v.MapIndex(k), fmt.Sprintf("%s[%v]", at, k)); err != nil {
				return err
			}
		}
	}
	return nil
}

// WriteAll writes waveforms.csv, summary.json and, if plots is set, the
// pictures of [Plots] as SVG into dir, which is made if need be, and returns
// the files' names. Each file appears whole or not at all.
func WriteAll(dir string, sim *engine.Simulation, summary any, plots bool) ([]string, error) {
	files := []File{
		{"waveforms.csv", func(w io.Writer) error { return WriteCSV(w, sim.Trace()) }},
		{"summary.json", func(w io.Writer) error { return WriteJSON(w, summary) }},
	}
	if plots {
		for _, p := range Plots(sim) {
			files = append(files, File{p.Name + ".svg", p.WriteSVG})
		}
	}
	return WriteFiles(dir, files)
}

// WriteComparison writes comparison.txt, comparison.csv and comparison.json
// and, if plots is set, overlays of the channels that differ most, into dir.
func WriteComparison(dir string, c *compare.Comparison, plots bool) ([]string, error) {
	files := []File{
		{"comparison.txt", c.WriteText},
		{"comparison.csv", c.WriteCSV},
		{"comparison.json", c.WriteJSON},
	}
	if plots {
		for _, p := range Overlays(c) {
			files = append(files, File{p.Name + ".svg", p.WriteSVG})
		}
	}
	return WriteFiles(dir, files)
}

// File is a file to be written: its name and what writes its content.
type File struct {
	Name  string
	Write func(w io.Writer) error
}

// WriteFiles writes files into dir, which is made if need be, and returns the names
// of those written. Each appears whole or not at all.
func WriteFiles(dir string, files []File) ([]string, error) {
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return nil, fmt.Errorf("output: %w", err)
	}
	var names []string
	for _, f := range files {
		if err := writeFile(dir, f); err != nil {
			return names, fmt.Errorf("output: %s: %w", f.Name, err)
		}
		names = append(names, f.Name)
	}
	return names, nil
}

// writeFile writes to a temporary file beside the target and renames it.
func writeFile(dir string, f File) (err error) {
	tmp, err := os.CreateTemp(dir, ".new-*")
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			tmp.Close()
			os.Remove(tmp.Name())
		}
	}()
	if err = f.Write(tmp); err != nil {
		return err
	}
	if err = tmp.Chmod(0o666 &^ umask); err != nil {
		return err
	}
	if err = tmp.Close(); err != nil {
		return err
	}
	return os.Rename(tmp.Name(), filepath.Join(dir, f.Name))
}

// umask keeps group and others from writing: a temporary file is private, and
// results are not.
const umask = 0o022
