"""Scripts for shells that ask ``nightfold completion --complete`` what may come next.

They hand over the shell's name and the words behind ``nightfold`` up to the cursor, parted by the control character
1F, which nobody types.
"""

from __future__ import annotations

BASH = r"""# bash completion of nightfold; in ~/.bashrc: source <(nightfold completion bash)
_nightfold() {
    local value about typed IFS=$'\x1f'
    typed="bash${IFS}${COMP_WORDS[*]:1:COMP_CWORD}"
    COMPREPLY=()
    while IFS=$'\t' read -r value about; do
        if [[ $value == :files ]]; then
            COMPREPLY=()
            compopt -o default 2>/dev/null
            return
        fi
        [[ ${COMP_WORDS[COMP_CWORD]} == [\"\']* ]] || printf -v value %q "$value"
        COMPREPLY+=("$value")
    done < <(nightfold completion --complete "$typed" 2>/dev/null)
}
complete -F _nightfold nightfold
"""

ZSH = r"""#compdef nightfold
# zsh completion of nightfold; in ~/.zshrc, below compinit: source <(nightfold completion zsh)
_nightfold() {
    local line typed
    local -a found
    typed="${(pj:\x1f:)${(@Q)words[2,CURRENT]}}"
    for line in "${(@f)$(nightfold completion --complete zsh$'\x1f'$typed 2>/dev/null)}"; do
        [[ -n $line ]] || continue
        if [[ ${line%%$'\t'*} == :files ]]; then
            _files
            return
        fi
        found+=("${${line%%$'\t'*}//:/\\:}:${line#*$'\t'}")
    done
    _describe nightfold found
}
compdef _nightfold nightfold
"""

FISH = r"""# fish completion of nightfold; in ~/.config/fish/config.fish: nightfold completion fish | source
function __nightfold_complete
    set -l words (commandline -opc)
    set -l typed (commandline -ct)
    set -l asked (string join \x1f -- fish $words[2..-1] "$typed")
    set -l found (nightfold completion --complete "$asked" 2>/dev/null)
    if string match -q ':files*' -- $found
        __fish_complete_path "$typed"
    else
        printf '%s\n' $found
    end
end
complete -c nightfold -f -a '(__nightfold_complete)'
"""

SCRIPTS = {"bash": BASH, "zsh": ZSH, "fish": FISH}
