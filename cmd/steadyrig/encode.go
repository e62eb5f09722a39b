package main

import (
	"encoding/json"
	"fmt"
	"io"
	"math"
	"reflect"
	"strings"

	"steadyrig/ident"
)

// printJSON prints the one document of a command under --json, whole or not at all.
func printJSON(w io.Writer, v any) error {
	b, err := document("the result", v)
	if err == nil {
		_, err = w.Write(b)
	}
	return err
}

// document is v as one indented JSON document.
func document(what string, v any) ([]byte, error) {
	return encoded(what, v, func(w io.Writer) error {
		b, err := json.MarshalIndent(v, "", "  ")
		if err == nil {
			_, err = w.Write(append(b, '\n'))
		}
		return err
	})
}

// encoded is what write makes of v. JSON has no form for a number that is not finite; that there is one is the data's
// doing, so it is refused by the name of its field, and nothing is written by halves.
func encoded(what string, v any, write func(io.Writer) error) ([]byte, error) {
	b, err := rendered(write)
	if err == nil {
		return b, nil
	}
	if field := notFinite(reflect.ValueOf(v)); field != "" {
		return nil, &ident.RefusedError{
			What: fmt.Sprintf("%s cannot be written: %s is not a finite number", what, strings.TrimPrefix(field, ".")),
			Do:   "look for rows that do not belong to the run, and give a longer log",
		}
	}
	return nil, fmt.Errorf("writing %s: %w", what, err)
}

// notFinite names the first number in v that JSON cannot hold as a path of JSON keys, empty: there is none.
func notFinite(v reflect.Value) string {
	if !v.IsValid() || v.CanInterface() && v.Type().Implements(reflect.TypeFor[json.Marshaler]()) {
		return ""
	}
	switch v.Kind() {
	case reflect.Float32, reflect.Float64:
		if x := v.Float(); math.IsNaN(x) || math.IsInf(x, 0) {
			return fmt.Sprintf(" (%g)", x)
		}
	case reflect.Pointer, reflect.Interface:
		return notFinite(v.Elem())
	case reflect.Struct:
		for i := range v.NumField() {
			key, _, _ := strings.Cut(v.Type().Field(i).Tag.Get("json"), ",")
			if !v.Type().Field(i).IsExported() || key == "-" {
				continue
			}
			if rest := notFinite(v.Field(i)); rest != "" {
				return "." + key + rest
			}
		}
	case reflect.Slice, reflect.Array:
		for i := range v.Len() {
			if rest := notFinite(v.Index(i)); rest != "" {
				return fmt.Sprintf("[%d]%s", i, rest)
			}
		}
	case reflect.Map:
		for _, k := range v.MapKeys() {
			if rest := notFinite(v.MapIndex(k)); rest != "" {
				return "." + k.String() + rest
			}
		}
	}
	return ""
}
