export function mount() {}
export function update() {}
