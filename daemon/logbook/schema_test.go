package logbook

import (
	"bytes"
	"fmt"
	"os"
	"path/filepath"
	"testing"

	"gemel/protocol"
)

func fixture(schema int) string {
	return filepath.Join("..", "..", "testdata", "logbook", fmt.Sprintf("schema-%d.db", schema))
}

// columnsAndViews is what queries rely on, whatever way a file came to its schema.
const columnsAndViews = `SELECT group_concat(t, ';') FROM (
	SELECT m.name || '.' || c.name || ' ' || c.type || c."notnull" AS t FROM sqlite_schema m, pragma_table_info(m.name) c WHERE m.type = 'table'
	UNION SELECT m.sql FROM sqlite_schema m WHERE m.type <> 'table' AND m.sql IS NOT NULL ORDER BY t)`

func ask(t *testing.T, b *Book, query string) (answer string) {
	t.Helper()
	if err := b.readers.QueryRow(query).Scan(&answer); err != nil {
		t.Fatal(err)
	}
	return answer
}

// exportsTheNight says that a book holds the night of the fixtures.
func exportsTheNight(t *testing.T, b *Book) {
	t.Helper()
	want, err := os.ReadFile(filepath.Join("testdata", "export.csv"))
	if err != nil {
		t.Fatal(err)
	}
	var got bytes.Buffer
	if err := b.Export(t.Context(), "20310203T200000Z-k3", &got); err != nil {
		t.Fatal(err)
	}
	if got.String() != string(want) {
		t.Errorf("it exports\n%s\nwant\n%s", &got, want)
	}
}

// Schemas are on people's disks: whoever changes schema.sql must give it a new number and bring old
// files along. Each fixture was made by Snapshot, by the first program that had its schema; only the
// present one's may be made anew.
func TestThePresentSchemaIsWhatItWas(t *testing.T) {
	file := fixture(schemaVersion)
	if *update {
		b := openBook(t, t.TempDir())
		exampleNight(t, b)
		os.Remove(file)
		if err := b.Snapshot(t.Context(), file); err != nil {
			t.Fatal(err)
		}
	}
	old, err := OpenReadOnly(file)
	if err != nil {
		t.Fatal(err)
	}
	defer closeVerified(t, old)
	const statements = `SELECT group_concat(sql, ';') FROM (SELECT sql FROM sqlite_schema ORDER BY name)`
	if was, is := ask(t, old, statements), ask(t, openBook(t, t.TempDir()), statements); was != is {
		t.Errorf("schema %d was\n%s\nand is\n%s", schemaVersion, was, is)
	}
	exportsTheNight(t, old)
}

func TestAnEarlierSchemaIsReadAsItIsAndBroughtAlongByADaemon(t *testing.T) {
	for schema := 1; schema < schemaVersion; schema++ {
		t.Run(fmt.Sprintf("schema %d", schema), func(t *testing.T) {
			dir := t.TempDir()
			file := filepath.Join(dir, fileName)
			was, err := os.ReadFile(fixture(schema))
			if err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(file, was, 0o644); err != nil {
				t.Fatal(err)
			}

			read, err := OpenReadOnly(file)
			if err != nil {
				t.Fatal(err)
			}
			exportsTheNight(t, read)
			a := read.Audit(t.Context())
			if len(a.Wrong) != 0 || a.Schema != schema || a.Unsummed != a.Entries || a.Entries != 7 {
				t.Errorf("audit %+v; want schema %d, 7 entries without sums, nothing wrong", a, schema)
			}
			if err := read.Close(); err != nil {
				t.Fatal(err)
			}
			if is, err := os.ReadFile(file); err != nil || !bytes.Equal(was, is) {
				t.Errorf("reading changed the file (%v)", err)
			}

			b := openBook(t, dir)
			if got := ask(t, b, "PRAGMA user_version"); got != fmt.Sprint(schemaVersion) {
				t.Errorf("schema %s; want %d", got, schemaVersion)
			}
			if got, want := ask(t, b, columnsAndViews), ask(t, openBook(t, t.TempDir()), columnsAndViews); got != want {
				t.Errorf("brought along it is\n%s\nwant\n%s", got, want)
			}
			exportsTheNight(t, b)
			mustAppend(t, b, event(protocol.BenchRun, 1, protocol.Trouble, "", "a line is gone"))
			mustNewRun(t, b, header("r2", ""))
			mustAppend(t, b, aReading("r2", 2))
			if a := b.Audit(t.Context()); len(a.Wrong) != 0 || a.Entries != 10 || a.Unsummed != 7 {
				t.Errorf("audit %+v; want 10 entries, 7 of them without sums", a)
			}
		})
	}
}
