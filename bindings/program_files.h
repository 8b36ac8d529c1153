// Files for the program: read whole, written by temporary name and rename, kept inside a folder.
#ifndef LATEWOOD_BINDINGS_PROGRAM_FILES_H
#define LATEWOOD_BINDINGS_PROGRAM_FILES_H

#include <stddef.h>

// The bytes of a regular file, or NULL with a reason in `why` (size bytes). *missing is set where
// there is no such file. Free with free().
char *lw__program_read(const char *path, size_t *n_bytes, int *missing, char *why, size_t size);

// Write folder/file whole: under a temporary name, flushed to the disk, then renamed. Signals that
// end the program wait until the file stands or is gone. Returns 0, or an exit code of sysexits: 73
// where the file cannot be made, 74 where its bytes cannot be written.
int lw__program_write(const char *folder, const char *file, const char *text, size_t n_bytes,
                      char *why, size_t size);

// Make a folder and those above it. 0 when it is there.
int lw__program_make_folder(const char *path, char *why, size_t size);

// The path of `name` inside `folder`, links resolved; NULL with a reason where it leads out of the
// folder or does not exist. Free with free().
char *lw__program_inside(const char *folder, const char *name, char *why, size_t size);

// Folder part of a path, "." where it has none. Free with free().
char *lw__program_folder_of(const char *path);

#endif
