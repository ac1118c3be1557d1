// The river and the turbine of reserve.py as a command, in float or double. INVENTED DATA.
//     g++ -O2 -ffp-contract=off -o inflow inflow.cpp
// It is called with a folder that holds request.json and draws.npy, and leaves result.npy there.
#include <algorithm>
#include <cmath>
#include <fstream>
#include <iostream>
#include <sstream>
#include <string>
#include <vector>

std::string text(const std::string &path) {
    std::stringstream all;
    all << std::ifstream(path, std::ios::binary).rdbuf();
    return all.str();
}
double number(const std::string &json, const std::string &key) {
    return std::stod(json.substr(json.find('"' + key + "\":") + key.size() + 3));
}
template <class T> int run(const std::string &folder, const std::string &json) {
    const size_t steps = number(json, "steps"), paths = number(json, "paths");
    const T start = number(json, "start"), level = number(json, "level"), volatility = number(json, "volatility");
    const T limit = number(json, "limit"), h = number(json, "h"), pull = number(json, "reversion") * number(json, "h");
    const std::string file = text(folder + "/draws.npy");  // bytes 8 and 9: the length of the header, which ends at 10
    const T *dB = (const T *)(file.data() + 10 + (unsigned char)file[8] + 256 * (unsigned char)file[9]);
    std::vector<T> out(paths);
    for (size_t i = 0; i < paths; i++) {
        T q = start, total = 0;
        for (size_t n = 0; n < steps; n++) {
            const T water = std::max(q, T(0));
            total += std::min(water, limit) * h;
            q += pull * (level - water) + volatility * std::sqrt(water) * dB[n * paths + i];
        }
        out[i] = total / T(steps * number(json, "h"));
    }
    std::string header = "{'descr': '<f" + std::to_string(sizeof(T)) + "', 'fortran_order': False, 'shape': (1, ";
    (header += std::to_string(paths) + ")}").resize(117, ' ');
    std::ofstream result(folder + "/result.npy", std::ios::binary);
    result << std::string("\x93NUMPY\1\0\x76\0", 10) << header << '\n';
    return !result.write((const char *)out.data(), paths * sizeof(T)).flush();
}
int main(int count, char **words) {
    const std::string folder = words[count - 1], json = text(folder + "/request.json");
    if (json.find("\"float32\"") != std::string::npos) return run<float>(folder, json);
    if (json.find("\"float64\"") != std::string::npos) return run<double>(folder, json);
    std::cerr << "inflow: float32 and float64 only" << std::endl;
    return 1;
}
