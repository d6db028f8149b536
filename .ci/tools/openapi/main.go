// Command openapi joins the OpenAPI documents that the generator writes for
// each .proto file into one on standard output, and makes it say what the
// service does: the generator writes camelCase names, the service knows
// snake_case only; the generator documents a stream as chunks of JSON, the
// service sends server-sent events; UNSPECIFIED is never sent nor taken.
package main

import (
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"strings"
	"unicode"
)

type object = map[string]any

func main() {
	if len(os.Args) < 2 {
		fmt.Fprintln(os.Stderr, "usage: openapi FILE...")
		os.Exit(2)
	}
	if err := run(os.Args[1:]); err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}

func run(files []string) error {
	joined := object{
		"openapi": "3.1.0",
		"info": object{
			"title":   "Leadline",
			"version": "v1",
			"description": "Beliefs about physical quantities from noisy readings. Bodies are JSON whatever " +
				"their Content-Type; names are snake_case, unknown ones are refused; in a path, a slash of an ID is %2F.",
		},
	}
	paths, schemas, tags := object{}, object{}, []any{}
	for _, file := range files {
		document, err := read(file)
		if err != nil {
			return err
		}
		maps.Copy(paths, document["paths"].(object))
		maps.Copy(schemas, document["components"].(object)["schemas"].(object))
		tags = append(tags, document["tags"].([]any)...)
	}
	joined["paths"], joined["tags"] = paths, tags
	joined["components"] = object{"schemas": schemas}
	encoder := json.NewEncoder(os.Stdout)
	encoder.SetEscapeHTML(false)
	encoder.SetIndent("", " ")
	return encoder.Encode(rewrite(joined))
}

func read(file string) (object, error) {
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	var document object
	if err := json.Unmarshal(text, &document); err != nil {
		return nil, fmt.Errorf("%s: %w", file, err)
	}
	return document, nil
}

// rewrite walks the document and corrects names, enums and streams.
func rewrite(node any) any {
	switch node := node.(type) {
	case []any:
		for i := range node {
			node[i] = rewrite(node[i])
		}
	case object:
		rewriteObject(node)
	}
	return node
}

func rewriteObject(node object) {
	for key, value := range node {
		node[key] = rewrite(value)
	}
	if properties, ok := node["properties"].(object); ok {
		renamed := object{}
		for name, schema := range properties {
			renamed[snake(name)] = schema
		}
		node["properties"] = renamed
	}
	if required, ok := node["required"].([]any); ok {
		for i, name := range required {
			required[i] = snake(name.(string))
		}
	}
	if name, ok := node["name"].(string); ok && node["in"] != nil {
		node["name"] = snake(name)
	}
	if values, ok := node["enum"].([]any); ok && values[0] == "UNSPECIFIED" {
		node["enum"] = values[1:]
	}
	rewriteStream(node)
}

// rewriteStream replaces the generator's description of a stream.
func rewriteStream(node object) {
	content, ok := node["content"].(object)
	if !ok {
		return
	}
	media, _ := content["application/json"].(object)
	schema, _ := media["schema"].(object)
	if title, _ := schema["title"].(string); !strings.HasPrefix(title, "Stream result of ") {
		return
	}
	event := schema["properties"].(object)["result"]
	node["content"] = object{"text/event-stream": object{"schema": event}}
}

func snake(name string) string {
	var b strings.Builder
	for _, r := range name {
		if unicode.IsUpper(r) {
			b.WriteByte('_')
		}
		b.WriteRune(unicode.ToLower(r))
	}
	return b.String()
}
