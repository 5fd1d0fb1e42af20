#!/bin/sh
# The rules of the source tree that a compiler does not see:
#   - includes go one way: base <- linalg <- problem <- plant <- design <- assess; write sees results, never
#     solvers; api sees all; cli sees the public header only, as a user would
#   - LAPACK is declared in src/linalg/lapack.h alone
#   - the library is silent: it prints nothing, never ends the process, touches no signal, locale, environment
# sh tests/faults/check_includes.sh [FOLDER]    FOLDER: where src is, default the project
[ $# -gt 0 ] || cd "$(dirname "$0")/../.." || exit 1
cd "${1:-.}" || exit 1
passed=0
failed=0
bad=$(mktemp) || exit 1
trap 'rm -f "$bad"' EXIT

# One rule: what stands in the file $bad breaks it.
rule() { # NAME
    if [ -s "$bad" ]; then
        echo "FAIL $1"
        sed 's/^/     /' "$bad"
        failed=$((failed + 1))
    else
        echo "PASS $1"
        passed=$((passed + 1))
    fi
}

# file:line:text of quoted includes below a folder that do not match the pattern.
includes_not() { # FOLDER PATTERN
    grep -nE '^[[:space:]]*#[[:space:]]*include[[:space:]]*"' -r "$1" --include='*.[ch]' |
        grep -vE "\"($2)\"" >"$bad"
}

for folder in base linalg problem plant design assess write api cli; do
    [ -n "$(ls "src/$folder/"*.c 2>/dev/null)" ] || {
        echo "src/$folder has no sources" >"$bad"
        rule "src/$folder is there"
    }
done

name='[a-z0-9_]+\.h'
allowed="flatgain.h|base/$name"
includes_not src/base "$allowed"
rule "base includes base"
for folder in linalg problem plant design assess; do
    allowed="$allowed|$folder/$name"
    includes_not "src/$folder" "$allowed"
    rule "$folder includes $(echo "$allowed" | sed 's/flatgain.h|//; s|/[^|]*||g; s/|/, /g')"
done
includes_not src/write "flatgain.h|base/$name|problem/$name|assess/findings.h|write/$name"
rule "write includes base, problem, assess/findings.h, write"
includes_not src/api "$allowed|write/$name|api/$name"
rule "api includes the library"
includes_not src/cli "flatgain.h|cli/$name"
rule "cli includes flatgain.h and cli"

# System headers of cli: those of the C library, nothing of the numerical ones.
grep -nE '#[[:space:]]*include[[:space:]]*<' -r src/cli --include='*.[ch]' |
    grep -vE '<(sys/)?(assert|ctype|dlfcn|errno|fcntl|float|inttypes|ioctl|limits|locale|math|signal|stat|stdarg|stdatomic|stdbool|stddef|stdint|stdio|stdlib|string|strings|termios|time|types|unistd|wait)\.h>' >"$bad"
rule "cli includes system headers of the C library only"

for path in src/*; do
    case ${path#src/} in
    base | linalg | problem | plant | design | assess | write | api | cli) ;;
    *) echo "$path" ;;
    esac
done >"$bad"
rule "src has no folder without a rule"

# Comments, strings and character constants become blanks; lines stay where they are.
code_of() { # FILE
    awk '{
        out = ""
        n = length($0)
        for (i = 1; i <= n; i++) {
            c = substr($0, i, 1)
            two = substr($0, i, 2)
            if (comment) {
                if (two == "*/") { comment = 0; i++; out = out " " }
            } else if (quote != "") {
                if (c == "\\") i++
                else if (c == quote) quote = ""
            } else if (two == "/*") { comment = 1; i++ }
            else if (two == "//") break
            else if (c == "\"" || c == "\047") { quote = c; out = out " " }
            else out = out c
        }
        quote = ""
        print out
    }' "$1"
}

# file:line:text of the library's code that matches; include lines are left alone.
library_with() { # PATTERN
    for file in src/*/*.[ch]; do
        case $file in src/cli/*) continue ;; esac
        code_of "$file" | grep -nE "$1" | sed "s|^|$file:|"
    done
}

library_with '^(extern[[:space:]]+)?(const[[:space:]]+)?(void|int|double|float|long)[[:space:]]+\**[a-z0-9]+_[[:space:]]*\(' |
    grep -v '^src/linalg/lapack.h:' >"$bad"
grep -nE '#[[:space:]]*include[[:space:]]*<(lapacke?|cblas|f77blas|lapacke_utils)[a-z_0-9]*\.h>' -r src >>"$bad"
rule "LAPACK is declared in linalg/lapack.h only"
library_with '[^[:alnum:]_](dgees_|dgemm_)' | grep '^src/linalg/lapack.h:' >"$bad"
[ -s "$bad" ] && : >"$bad" || echo "the declarations of dgees and dgemm are not found: the rule above tests nothing" >"$bad"
rule "linalg/lapack.h declares LAPACK"

library_with '(^|[^[:alnum:]_])(printf|vprintf|fprintf|vfprintf|dprintf|puts|fputs|putchar|putc|fputc|fwrite|write|perror|psignal|syslog|stdout|stderr)([^[:alnum:]_]|$)' |
    grep -vE '__format__|format\(printf' >"$bad"
rule "the library prints nothing"
library_with '(^|[^[:alnum:]_])(exit|_exit|_Exit|quick_exit|abort|atexit|assert|longjmp|fork|system|popen|exec[lv][pe]*)[[:space:]]*\(' >"$bad"
rule "the library never ends the process or starts another"
library_with '(^|[^[:alnum:]_])(signal|sigaction|raise|kill|sigprocmask|pthread_sigmask|alarm|setitimer)[[:space:]]*\(' >"$bad"
rule "the library touches no signals"
library_with '(^|[^[:alnum:]_])(setlocale|uselocale|newlocale|getenv|secure_getenv|setenv|putenv|unsetenv|chdir|umask)[[:space:]]*\(' >"$bad"
rule "the library touches neither locale nor environment"
library_with '(^|[^[:alnum:]_])(rand|srand|random|srandom|drand48|strtok|strerror|localtime|gmtime|ctime|asctime|nlopt_srand)[[:space:]]*\(' >"$bad"
rule "the library calls nothing with hidden state"

echo "$passed passed, $failed failed"
[ "$failed" = 0 ]
