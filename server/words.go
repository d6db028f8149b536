package server

import (
	"context"

	"google.golang.org/protobuf/proto"
)

// words holds an answer put into words. The REST handler puts an empty one into
// the context of a request that asked for text; the service, which knows the
// engine's values behind the message, fills it.
type words struct{ text string }

type wordsKey struct{}

func withWords(ctx context.Context) context.Context {
	return context.WithValue(ctx, wordsKey{}, new(words))
}

// inWords has an answer put into words if the request asked for text.
func inWords(ctx context.Context, say func() string) {
	if w, ok := ctx.Value(wordsKey{}).(*words); ok {
		w.text = say()
	}
}

// chooseWords is the gateway's hook before an answer is written.
func chooseWords(ctx context.Context, message proto.Message) (any, error) {
	if w, ok := ctx.Value(wordsKey{}).(*words); ok && w.text != "" {
		return wordsPage(w.text), nil
	}
	return message, nil
}
